"""The frame of the benchmarks: what it measures, says and writes."""

import json
from io import StringIO

import numpy as np
import pytest
from rich.console import Console
from tests.benchmarks import table
from tests.benchmarks.frame import Row, best, in_child


def held(megabytes):
    block = np.ones(int(megabytes * 1e6 / 8))
    return {"sum": float(block.sum()), "cpu_s": best(lambda: np.sort(block), repeats=1)}


def test_a_child_tells_its_answer_its_time_and_its_memory():
    small, large = (in_child(held, megabytes=m) for m in (8, 208))
    assert large.answer["sum"] == 26e6
    assert large.cpu_s >= large.answer["cpu_s"] > 0
    assert 190 < large.peak_mb - small.peak_mb < 450  # the block, and its sorted copy


def test_a_child_that_fails_is_an_error(capfd):
    with pytest.raises(RuntimeError, match="held failed"):
        in_child(held, megabytes="many")
    assert "can't multiply" in capfd.readouterr().err


@pytest.mark.parametrize(
    ("row", "ratio", "met"),
    [
        (Row("a", 1, "GB", 2.0, 1.0, bar=2.5), 2.0, True),
        (Row("a", 1, "GB", 2.0, 1.0, bar=1.5), 2.0, False),
        (Row("a", 1, "GB", 2.0, 90.0, bar=40, at_least=True), 45.0, True),
        (Row("a", 1, "GB", 2.0, 1.0, bar=2.5, peak_mb=1600, peak_bar_mb=1500), 2.0, False),
        (Row("a", 1, "GB", 2.0, 1.0, bar=2.5, holds=False), 2.0, False),
        (Row("a", 1, "GB", 2.0), None, None),
    ],
)
def test_a_row_meets_its_bars_or_not(row, ratio, met):
    assert row.ratio == ratio
    assert row.met is met


def test_rows_become_a_table_a_file_and_figures(tmp_path):
    rows = [Row("sum", s, "GB", 0.2 * s + 0.1, 0.1 * s, bar=4, reference="numpy", peak_mb=100 + s) for s in (1, 4, 16)]
    said = StringIO()
    table.show(rows, Console(file=said, width=160))
    assert all(word in said.getvalue() for word in ("numpy", "16 GB", "R²", "yes", "grows"))
    file = tmp_path / "benchmarks.json"
    table.write(file, {"old": [Row("other", 1, "MB", 1.0)]})
    held = table.write(file, {"new": rows})
    assert held["new"] == rows
    assert list(held) == ["new", "old"]
    assert set(json.loads(file.read_text())["benches"]["new"]["machine"]) == {
        "processor", "cores", "memory_gb", "system",
    }  # fmt: skip
    (curve,) = table.curves(rows)
    assert curve.line == pytest.approx((0.2, 0.1))
    assert curve.r2 > 0.999
    assert curve.flat == pytest.approx(116 / 101)
    table.page(held, table.made(file), tmp_path / "README.md")
    text = (tmp_path / "README.md").read_text("utf-8")
    assert "| sum | 16 GB | 3.3 CPU s | 1.6 numpy | 2.06 | ≤ 4 | 116 | yes |" in text
    assert "| sum | 1, 4, 16 GB | 0.2 CPU s | 1.0000 | 1.15 (grows) |" in text
    assert {p.name for p in table.draw(rows, tmp_path)} == {"cost.png", "cost.svg", "memory.png", "memory.svg"}

"""What is made of rows: a table on the terminal, ``benchmarks.json``, cost and memory against size as figures."""

from __future__ import annotations

import json
import os
import platform
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
from rich.console import Console
from rich.table import Table
from tests.benchmarks.frame import Row

from leadline.base.atomic import write_text
from leadline.report.style import ACCENT, INK, SOFT, drawing, new_figure, save

LIBRARIES = ("leadline", "numpy", "scipy", "numba", "scikit-image", "SimpleITK", "tifffile", "zarr", "dask")
FLAT, STRAIGHT = 1.10, 0.98
COLUMNS_PER_ROW = 3


@dataclass(frozen=True, slots=True)
class Curve:
    """One work over at least three sizes. ``per_unit`` : cost of one more unit of size; ``flat`` : peak over least."""

    work: str
    unit: str
    measured: str
    size: tuple[float, ...]
    ours: tuple[float, ...]
    peak_mb: tuple[float, ...]

    @property
    def line(self) -> tuple[float, float]:
        """Slope and intercept of the straight line of least squares."""
        slope, start = np.polyfit(self.size, self.ours, 1)
        return float(slope), float(start)

    @property
    def r2(self) -> float:
        """Share of the variance of the cost that the straight line explains."""
        ours = np.asarray(self.ours)
        slope, start = self.line
        rest = ours - slope * np.asarray(self.size) - start
        return float(1 - (rest**2).sum() / ((ours - ours.mean()) ** 2).sum())

    @property
    def flat(self) -> float | None:
        """Most over least of the peaks; None where they were not measured."""
        return max(self.peak_mb) / min(self.peak_mb) if self.peak_mb else None


def curves(rows: Sequence[Row]) -> list[Curve]:
    """The works of ``rows`` that were measured at three sizes or more, in order of size."""
    found = []
    for work in dict.fromkeys(row.work for row in rows):
        same = sorted((row for row in rows if row.work == work), key=lambda row: row.size)
        if len({row.size for row in same}) >= 3:
            peaks = tuple(row.peak_mb for row in same if row.peak_mb is not None)
            found.append(
                Curve(
                    work,
                    same[0].unit,
                    same[0].measured,
                    tuple(row.size for row in same),
                    tuple(row.ours for row in same),
                    peaks if len(peaks) == len(same) else (),
                )
            )
    return found


MEASURES = ("work", "size", "ours", "reference", "ratio", "bar", "peak MB", "met")
GROWTH = ("work", "sizes", "each further unit", "R² of a line", "peak, most / least")
LEFT = ("work", "size", "sizes", "reference")


def _measures(row: Row) -> tuple[str, ...]:
    """A row in words, one for each of ``MEASURES``."""
    peak = "-" if row.peak_mb is None else f"{row.peak_mb:.0f}"
    sign = "≥" if row.at_least else "≤"
    return (
        row.work,
        f"{row.size:g} {row.unit}",
        f"{row.ours:.3g} {row.measured}",
        "-" if row.theirs is None else f"{row.theirs:.3g} {row.reference}",
        "-" if row.ratio is None else f"{row.ratio:.2f}",
        "-" if row.bar is None else f"{sign} {row.bar:g}",
        peak if row.peak_bar_mb is None else f"{peak} ≤ {row.peak_bar_mb:.0f}",
        {True: "yes", False: "no", None: "-"}[row.met],
    )


def _growth(c: Curve) -> tuple[str, ...]:
    """A curve in words, one for each of ``GROWTH``."""
    return (
        c.work,
        f"{', '.join(f'{s:g}' for s in c.size)} {c.unit}",
        f"{c.line[0]:.3g} {c.measured}",
        f"{c.r2:.4f}" + ("" if c.r2 > STRAIGHT else " (bent)"),
        "-" if c.flat is None else f"{c.flat:.2f}" + ("" if c.flat <= FLAT else " (grows)"),
    )


def show(rows: Sequence[Row], console: Console) -> None:
    """Print the rows, and below them how cost and memory grow."""
    growth = [_growth(curve) for curve in curves(rows)]
    for title, names, lines in (
        ("Benchmarks", MEASURES, [_measures(row) for row in rows]),
        ("Growth with size", GROWTH, growth),
    ):
        table = Table(title=title, header_style="bold")
        for name in names:
            table.add_column(name, justify="left" if name in LEFT else "right")
        for line in lines:
            bad = line[-1] == "no" or any(word.endswith((" (bent)", " (grows)")) for word in line)
            table.add_row(*line, style="bold red" if bad else None)
        if lines:
            console.print(table)
    for row in rows:
        if row.note:
            console.print(f"{row.work}, {row.size:g} {row.unit}: {row.note}", markup=False, highlight=False)


def page(benches: dict[str, list[Row]], made: dict[str, str], path: Path) -> None:
    """Write the last figures of every benchmark as one page. ``made`` : when and on what each was measured."""
    rows = [row for held in benches.values() for row in held]
    lines = [
        "# What it costs",
        "",
        "Made by `make bench`; all figures with versions and machine are in [benchmarks.json](benchmarks.json).",
        "Costs are CPU seconds; each reference is measured in the same process. Ratios are ours over the reference,",
        "or the reference over ours where the bar says ≥.",
        "",
        *_markdown(MEASURES, [_measures(row) for row in rows]),
        "",
        "## Growth with size",
        "",
        *_markdown(GROWTH, [_growth(curve) for curve in curves(rows)]),
        "",
        "![Cost against size](cost.png)",
        "![Memory against size](memory.png)",
        "",
        "## Notes",
        "",
        *(f"- {row.work}, {row.size:g} {row.unit}: {row.note}" for row in rows if row.note),
        *(f"- `{name}`: {said}" for name, said in made.items()),
    ]
    write_text(path, "\n".join(lines) + "\n")


def _markdown(names: Sequence[str], lines: Sequence[Sequence[str]]) -> list[str]:
    rule = ["---" if name in LEFT else "---:" for name in names]
    return ["| " + " | ".join(line) + " |" for line in (names, rule, *lines)]


def made(path: Path) -> dict[str, str]:
    """When and on what each benchmark in the JSON file was measured, in words."""
    told = {}
    for name, bench in json.loads(path.read_text("utf-8"))["benches"].items():
        m = bench["machine"]
        told[name] = f"{bench['day']}, {m['processor']}, {m['cores']} cores, {m['memory_gb']:g} GB, {m['system']}"
    return told


def write(path: Path, benches: dict[str, list[Row]]) -> dict[str, list[Row]]:
    """Put ``benches`` (name to rows) in the place of their like in the JSON file at ``path``; returns all it holds.

    Beside the rows stand versions, machine and day, and no name or path of the machine.
    """
    kept = json.loads(path.read_text("utf-8"))["benches"] if path.is_file() else {}
    made = {"day": f"{datetime.now(UTC):%Y-%m-%d}", "machine": machine(), "versions": versions()}
    for name, rows in benches.items():
        kept[name] = made | {"rows": [asdict(row) | {"ratio": row.ratio, "met": row.met} for row in rows]}
    write_text(path, json.dumps({"benches": dict(sorted(kept.items()))}, indent=1, ensure_ascii=False) + "\n")
    return {name: [_row(row) for row in bench["rows"]] for name, bench in sorted(kept.items())}


def _row(stored: dict[str, Any]) -> Row:
    return Row(**{key: value for key, value in stored.items() if key not in ("ratio", "met")})


def machine() -> dict[str, Any]:
    """Cores, memory and processor."""
    info = Path("/proc/cpuinfo")
    lines = info.read_text().splitlines() if info.is_file() else []
    models = [line.split(":", 1)[1].strip() for line in lines if line.startswith("model name")]
    return {
        "processor": models[0] if models else platform.machine(),
        "cores": os.cpu_count(),
        "memory_gb": round(os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e9, 1),
        "system": platform.system(),
    }


def versions() -> dict[str, str]:
    """Versions of Python and of the libraries that costs depend on."""
    return {"python": platform.python_version()} | {name: version(name) for name in LIBRARIES}


def draw(rows: Sequence[Row], folder: Path) -> list[Path]:
    """Cost against size and memory against size, a panel for each work of three sizes or more; PNG and SVG."""
    growth = curves(rows)
    remembered = [c for c in growth if c.peak_mb]
    drawn = []
    for name, shown, panel in (("cost", growth, _cost), ("memory", remembered, _memory)):
        if not shown:
            continue
        with drawing():
            columns = min(COLUMNS_PER_ROW, len(shown))
            lines = -(-len(shown) // columns)
            figure = new_figure(2.6 * columns, 2.2 * lines)
            for k, curve in enumerate(shown, 1):
                axes = figure.add_subplot(lines, columns, k)
                panel(axes, curve)
                axes.set(title=curve.work, xlabel=f"size, {curve.unit}", xlim=(0, None), ylim=(0, None))
        for suffix in (".png", ".svg"):
            drawn.append(folder / (name + suffix))
            save(figure, drawn[-1])
    return drawn


def _cost(axes: Any, curve: Curve) -> None:
    slope, start = curve.line
    ends = np.array([0, max(curve.size) * 1.05])
    axes.plot(ends, slope * ends + start, color=SOFT, linewidth=0.8)
    axes.plot(curve.size, curve.ours, "o", color=ACCENT, markersize=4)
    axes.set_ylabel(curve.measured)
    axes.text(0.04, 0.96, f"R² {curve.r2:.4f}", transform=axes.transAxes, va="top", color=INK)


def _memory(axes: Any, curve: Curve) -> None:
    low = min(curve.peak_mb)
    axes.axhspan(low, low * FLAT, color=SOFT, alpha=0.2, linewidth=0)
    axes.plot(curve.size, curve.peak_mb, "o-", color=ACCENT, markersize=4, linewidth=0.8)
    axes.set_ylim(top=1.15 * max(curve.peak_mb))
    axes.set_ylabel("peak memory, MB")
    axes.text(0.04, 0.06, "grey: within 10 % of the least", transform=axes.transAxes, color=SOFT)

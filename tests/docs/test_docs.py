"""Every command and every Python line of the how-tos is run, in the order of the page, on tiny brains."""

import contextlib
import io
import json
import re
import tomllib
from pathlib import Path

import pytest

DOCS = Path(__file__).parents[2] / "docs"
PAGES = sorted(DOCS.glob("*.md"))
BLOCK = re.compile(r"^```(\w+)\n(.*?)^```", re.MULTILINE | re.DOTALL)
RESULTS = {
    "first-brain.md": ["kestrel-07/out/report.html"],
    "bring-your-atlas.md": ["my-atlas/atlas.toml"],
    "tell-tracks-apart.md": ["cells_in_atlas.csv"],
    "units.md": ["kestrel-07/out/units_cell_type.png", "pooled/units_latency_ms.svg"],
    "report.md": ["kestrel-07.html", "figures/section_A.pdf"],
    "export.md": [
        "located.nwb",
        "kestrel-07/out/probeinterface/A.json",
        "bids/sub-kestrel07/ecephys/sub-kestrel07_space-Other_electrodes.tsv",
    ],
    "compare.md": ["comparison/comparison.png"],
}


@pytest.mark.parametrize("page", PAGES, ids=lambda p: p.name)
def test_a_page_does_what_it_says(page, desk, run_line):
    names = {"__name__": "page"}
    for kind, text in BLOCK.findall(page.read_text()):
        if kind == "console":
            for line in text.splitlines():
                assert line.startswith("$ "), line
                run_line(line[2:])
        elif kind == "python":
            with contextlib.redirect_stdout(io.StringIO()):
                exec(compile(text, str(page), "exec"), names)
        elif kind == "toml":
            tomllib.loads(text)
        else:
            assert kind in ("text", "csv", "json"), kind
    for name in RESULTS.get(page.name, ()):
        assert (desk / name).stat().st_size > 0


def test_the_notebook_runs(desk):
    names = {"__name__": "notebook"}
    for cell in json.loads((DOCS / "example.ipynb").read_text())["cells"]:
        if cell["cell_type"] == "code":
            exec(compile("".join(cell["source"]), "example.ipynb", "exec"), names)
    assert (desk / "section.png").stat().st_size > 10_000


@pytest.mark.parametrize("page", PAGES, ids=lambda p: p.name)
def test_links_between_pages_lead_somewhere(page):
    for target in re.findall(r"\]\(([^)#\s]+)", page.read_text()):
        assert (page.parent / target).exists(), target


def test_every_message_of_the_troubleshooting_page_is_one_that_leadline_says():
    source = "\n".join(p.read_text() for p in (DOCS.parent / "align" / "leadline").rglob("*.py"))
    source = re.sub(r'"\s*\n\s*f?"', "", source)  # messages that are written over several lines
    rows = re.findall(r"^\| (`.*?`.*?) \|", (DOCS / "troubleshooting.md").read_text(), re.MULTILINE)
    pieces = [piece.strip(" :`") for row in rows for word in re.findall(r"`([^`]+)`", row) for piece in word.split("…")]
    assert len(rows) > 8
    assert [piece for piece in pieces if piece and piece not in source] == []

"""``make bench``: every benchmark, or those named: tables and two figures in docs/benchmarks."""

from __future__ import annotations

import sys
from importlib import import_module
from pathlib import Path

from rich.console import Console
from tests.benchmarks import table
from tests.benchmarks.frame import ROOT, Row

OUT = ROOT / "docs" / "benchmarks"


def main(names: list[str], folder: Path = OUT) -> int:
    """Run the benchmarks; 1 when a bar is missed, 2 when a name is unknown."""
    known = [path.stem.removeprefix("bench_") for path in sorted(Path(__file__).parent.glob("bench_*.py"))]
    unknown = [name for name in names if name not in known]
    if unknown:
        sys.stderr.write(f"there is no benchmark {', '.join(unknown)}; there are {', '.join(known)}\n")
        return 2
    console = Console(width=None if sys.stdout.isatty() else 160)
    new: list[Row] = []
    for name in names or known:
        console.print(f"== {name}", highlight=False)
        rows = []
        for row in import_module(f"tests.benchmarks.bench_{name}").rows():
            rows.append(row)
            console.print(f"{row.work}, {row.size:g} {row.unit}: {row.ours:.3g} {row.measured}", highlight=False)
        # written after each, so that hours of measuring are not lost to the last one
        held = table.write(folder / "benchmarks.json", {name: rows})
        new += rows
    table.show(new, console)
    table.draw([row for rows in held.values() for row in rows], folder)
    table.page(held, table.made(folder / "benchmarks.json"), folder / "README.md")
    return int(any(row.met is False for row in new))


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))

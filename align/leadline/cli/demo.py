"""``leadline demo``."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from leadline.cli.terminal import out, terminal_progress


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command()(demo)


def demo(
    folder: Annotated[Path, typer.Argument(help="Where to write the brain.", metavar="DIR")] = Path("leadline-demo"),
    seed: Annotated[int, typer.Option(help="Another seed is another brain.")] = 1,
) -> None:
    """Write an invented brain with known truth, run every stage on it and print how close it came."""
    from leadline.demo.run import run_demo

    with terminal_progress(False) as progress:
        report = run_demo(folder, seed, progress)
    out(report)

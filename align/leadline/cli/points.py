"""``leadline map``."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer

from leadline.cli.brains import BrainArg, Quiet
from leadline.cli.terminal import out, terminal_progress


class Side(StrEnum):
    """Where points are carried to."""

    atlas = "atlas"
    stack = "stack"


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command(name="map")(carry)


def carry(
    brain: BrainArg,
    points: Annotated[Path, typer.Argument(help="A CSV table of points.", metavar="POINTS.csv")],
    to: Annotated[Side, typer.Option(help="'atlas': from s0_um,s1_um,s2_um; 'stack': from ap_um,dv_um,ml_um.")],
    output: Annotated[Path | None, typer.Option("-o", "--output", help="Write here, not to standard output.")] = None,
    quiet: Quiet = False,
) -> None:
    """Carry points between stack and atlas and name their regions."""
    from leadline.base.errors import LeadlineError
    from leadline.io.brainfile import read_brain
    from leadline.io.tables import table_text, write_table
    from leadline.pipeline.mapping import map_points
    from leadline.pipeline.run import run

    if not points.is_file():
        raise LeadlineError("there is no such file", where=str(points), mend="Name a CSV table of points")
    described = read_brain(brain)
    with terminal_progress(quiet) as progress:
        run(described, until="register", progress=progress)
    table = map_points(described, points, to.value)
    if output is None:
        out(table_text(table).rstrip("\n"))
    else:
        write_table(table, output)

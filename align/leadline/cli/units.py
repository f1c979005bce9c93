"""``leadline units``."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from leadline.cli.brains import Json, Quiet
from leadline.cli.terminal import out, out_json, terminal_progress

if TYPE_CHECKING:
    import pandas as pd

    from leadline.model.brain import Brain

BrainsArg = Annotated[list[Path], typer.Argument(help="One or several brains.", metavar="BRAIN...")]


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command()(units)


def units(
    brains: BrainsArg,
    value: Annotated[
        str | None, typer.Option("--value", help="Draw this column of the unit table in atlas space.", metavar="COLUMN")
    ] = None,
    period: Annotated[
        float | None, typer.Option(help="The value comes round at this number (180 for orientations in degrees).")
    ] = None,
    output: Annotated[
        Path | None,
        typer.Option("-o", "--output", help="Folder of the picture; out/ of a single brain, else the current folder."),
    ] = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Give every unit its region and layer; with --value, draw a column of yours in atlas space."""
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.units import pool, write_units

    described = [read_brain(brain) for brain in brains]
    with terminal_progress(quiet or json) as progress:
        tables = [write_units(brain, progress) for brain in described]
    pooled = pool(described, tables)
    pictures = [] if value is None else _draw(described, pooled, value, period, output)
    if json:
        files = [str(b.out / "units.csv") for b in described]
        out_json({"units": len(pooled), "tables": files, "pictures": [str(p) for p in pictures]})
    elif not quiet:
        for brain, table in zip(described, tables, strict=True):
            out(f"{brain.name}: {len(table)} units in {table['region'].nunique()} regions; {brain.out / 'units.csv'}")
        for picture in pictures:
            out(f"picture: {picture}")


def _draw(
    brains: list[Brain], table: pd.DataFrame, value: str, period: float | None, output: Path | None
) -> list[Path]:
    import re

    from leadline.pipeline.atlas_import import load_atlas
    from leadline.pipeline.units import require_value
    from leadline.report.atlas_view import draw_value
    from leadline.report.style import save

    require_value(table, value, period)
    folder = output or (brains[0].out if len(brains) == 1 else Path())
    figure = draw_value(table, value, load_atlas(brains[0].atlas), period=period)
    stem = "units_" + re.sub(r"[^\w.+-]+", "_", value)
    files = [folder / f"{stem}.png", folder / f"{stem}.svg"]
    for file in files:
        save(figure, file)
    return files

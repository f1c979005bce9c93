"""``leadline atlas import`` and ``leadline atlas check``."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from leadline.cli.brains import Json
from leadline.cli.terminal import out, out_json, terminal_progress

app = typer.Typer(no_args_is_help=True, rich_markup_mode=None)


def _three(text: str | None, key: str) -> tuple[float, float, float] | None:
    from leadline.base.errors import LeadlineError

    if text is None:
        return None
    try:
        a, b, c = (float(part) for part in text.replace(",", " ").split())
    except ValueError as error:
        raise LeadlineError(f"'{text}' is not three numbers", where=key, mend="Write for example 25,25,25") from error
    return a, b, c


@app.command(name="import")
def import_(
    labels: Annotated[Path, typer.Argument(help="Label volume: NRRD, NIfTI or TIFF.")],
    template: Annotated[Path, typer.Argument(help="Template volume on the same grid.")],
    structures: Annotated[Path, typer.Argument(help="Structure table: CSV, or nested JSON with children.")],
    out_folder: Annotated[Path, typer.Argument(help="The atlas folder to write.", metavar="OUT")],
    name: Annotated[str, typer.Option(help="Name of the atlas.")],
    citation: Annotated[str, typer.Option(help="How its makers ask to be cited.")] = "",
    licence: Annotated[str, typer.Option(help="Its licence.")] = "",
    orientation: Annotated[str | None, typer.Option(help="Three letters, where the files carry none.")] = None,
    voxel_um: Annotated[str | None, typer.Option(help="Such as 25,25,25, where the files carry none.")] = None,
    bregma_um: Annotated[str | None, typer.Option(help="ap,dv,ml of bregma in atlas um.")] = None,
    json: Json = False,
) -> None:
    """Build an atlas folder from a label volume, a template and a structure table."""
    from leadline.pipeline.atlas_import import import_atlas

    with terminal_progress(json) as progress:
        summary = import_atlas(
            labels, template, structures, out_folder, name=name, citation=citation, licence=licence,
            orientation=orientation, voxel_um=_three(voxel_um, "--voxel-um"),
            bregma_um=_three(bregma_um, "--bregma-um"), progress=progress,
        )  # fmt: skip
    out_json(summary) if json else out("\n".join(f"{key}: {value}" for key, value in summary.items()))


@app.command(name="check")
def check(
    folder: Annotated[Path, typer.Argument(help="An atlas folder.", metavar="ATLAS")],
    json: Json = False,
) -> None:
    """Check an atlas folder and say what it holds."""
    from leadline.pipeline.atlas_import import check_atlas

    summary = check_atlas(folder)
    out_json(summary) if json else out("\n".join(f"{key}: {value}" for key, value in summary.items()))

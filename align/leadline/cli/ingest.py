"""``leadline ingest``: a large stack brought once to the resolutions that the stages need."""

from __future__ import annotations

from typing import Annotated

import typer

from leadline.base.progress import Cancelled
from leadline.cli.brains import BrainArg, Json, Quiet
from leadline.cli.terminal import err, out, out_json, terminal_progress

KeepFull = Annotated[bool, typer.Option("--keep-full", help="Store the full resolution as well.")]


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command()(ingest)


def ingest(brain: BrainArg, keep_full: KeepFull = False, json: Json = False, quiet: Quiet = False) -> None:
    """Bring a large stack once to the resolutions that the stages need (also done on first need)."""
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.bench import Bench
    from leadline.pipeline.ingest import ingest as bring_in
    from leadline.pipeline.lock import sole_worker

    read = read_brain(brain)
    with sole_worker(read.file), terminal_progress(quiet or json) as progress:
        try:
            done = bring_in(Bench(read, progress), on_need=False, keep_full=keep_full)
        except (KeyboardInterrupt, Cancelled):
            err("leadline: stopped; what is done is kept, run again to go on")
            raise typer.Exit(1) from None
    if json:
        rows = [
            {
                "channel": one.channel,
                "folder": None if one.folder is None else str(one.folder),
                "made": one.made,
                "levels_um": [list(size) for size in one.levels_um],
            }
            for one in done
        ]
        out_json({"brain": read.name, "channels": rows})
    elif not quiet:
        for one in done:
            sizes = ", ".join("x".join(f"{um:g}" for um in size) for size in one.levels_um)
            how = "written" if one.made else "up to date" if one.folder else "used as it is"
            out(f"{one.channel}: {how}; resolutions {sizes} um{f'; {one.folder}' if one.folder else ''}")

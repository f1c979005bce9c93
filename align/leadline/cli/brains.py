"""Commands on a brain: check, run, and one stage at a time."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from leadline.base.progress import Cancelled
from leadline.cli.terminal import err, out, out_json, terminal_progress

if TYPE_CHECKING:
    from leadline.model.brain import Brain
    from leadline.pipeline.run import Summary

BrainArg = Annotated[Path, typer.Argument(help="A brain.toml or its folder.", metavar="BRAIN")]
BrainsArg = Annotated[
    list[str], typer.Argument(help="One or several: a brain.toml, its folder, or a quoted pattern.", metavar="BRAIN...")
]
Json = Annotated[bool, typer.Option("--json", help="Print a machine-readable summary.")]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="Print errors only.")]
Verbose = Annotated[bool, typer.Option("--verbose", "-v", help="Print each step, also those that were skipped.")]
NoPhysiology = Annotated[
    bool, typer.Option("--no-physiology", help="Leave out what the recordings say of depth: anchors and dye alone.")
]


def add_to(app: typer.Typer) -> None:
    """Add the commands."""
    app.command()(check)
    app.command()(run)
    app.command()(register)
    app.command()(trace)
    app.command()(profile)
    app.command()(anchor)
    app.command()(locate)


def check(brain: BrainArg, json: Json = False, quiet: Quiet = False) -> None:
    """Look at every input and say all that is wrong at once, computing nothing heavy."""
    from leadline.base.errors import Faults
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.check import check as look

    found = look(read_brain(brain))
    if json:
        out_json({"faults": [str(f) for f in found.faults], "notes": list(found.notes)})
    elif not quiet:
        for note in found.notes:
            out(f"note: {note}")
    if found.faults:
        raise found.faults[0] if len(found.faults) == 1 else Faults(found.faults)
    if not json and not quiet:
        out("every input can be read")


def run(
    brains: BrainsArg,
    workers: Annotated[
        int | None, typer.Option(min=1, help="Brains at once; by default as processors and memory allow.", metavar="N")
    ] = None,
    scheduler: Annotated[
        str | None, typer.Option(help="Run on a dask.distributed cluster: its address or scheduler file.")
    ] = None,
    no_physiology: NoPhysiology = False, json: Json = False, quiet: Quiet = False, verbose: Verbose = False,
) -> None:  # fmt: skip
    """Run every stage in order; what has not changed is not run again. Several brains run side by side."""
    from leadline.pipeline.many import is_pattern

    if len(brains) == 1 and scheduler is None and not is_pattern(brains[0]):
        _run(Path(brains[0]), "locate", no_physiology, json, quiet, verbose)
        return
    from leadline.cli.many import run_brains

    code = run_brains(
        brains, workers=workers, scheduler=scheduler, physiology=not no_physiology, json=json, quiet=quiet,
        verbose=verbose,
    )  # fmt: skip
    raise typer.Exit(code)


def register(brain: BrainArg, json: Json = False, quiet: Quiet = False, verbose: Verbose = False) -> None:
    """Register the stack to the atlas."""
    _run(brain, "register", False, json, quiet, verbose)


def trace(brain: BrainArg, json: Json = False, quiet: Quiet = False, verbose: Verbose = False) -> None:
    """Find the dye tracks and give each to its penetration."""
    _run(brain, "trace", False, json, quiet, verbose)


def profile(brain: BrainArg, json: Json = False, quiet: Quiet = False, verbose: Verbose = False) -> None:
    """Turn the recordings into depth profiles."""
    _run(brain, "profile", False, json, quiet, verbose)


def anchor(
    brain: BrainArg,
    accept: Annotated[
        list[str] | None,
        typer.Option("--accept", help="Accept a suggestion: its row in suggestions.csv, its landmark, or 'all'."),
    ] = None,
    no_physiology: NoPhysiology = False, json: Json = False, quiet: Quiet = False, verbose: Verbose = False,
) -> None:  # fmt: skip
    """Infer the depth maps and suggest anchors; with --accept, make suggestions anchors first."""
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.anchors import accept as accept_suggestions

    if accept:
        for taken in accept_suggestions(read_brain(brain), accept):
            if not json and not quiet:
                out(
                    f"accepted: {taken.penetration}/{taken.shank} {taken.landmark} "
                    f"({taken.tip_distance_um:g} um from the tip)"
                )
    _run(brain, "anchor", no_physiology, json, quiet, verbose)


def locate(
    brain: BrainArg, no_physiology: NoPhysiology = False, json: Json = False, quiet: Quiet = False,
    verbose: Verbose = False,
) -> None:  # fmt: skip
    """Give every channel its region and layer."""
    _run(brain, "locate", no_physiology, json, quiet, verbose)


def _run(path: Path, until: str, no_physiology: bool, json: bool, quiet: bool, verbose: bool) -> None:
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.run import run as run_brain
    from leadline.pipeline.run import without_physiology
    from leadline.pipeline.summary import summary_json

    brain = read_brain(path)
    if no_physiology:
        brain = without_physiology(brain)
    with terminal_progress(quiet or json) as progress:
        try:
            summary = run_brain(brain, until=until, progress=progress)
        except (KeyboardInterrupt, Cancelled):
            err("leadline: stopped; finished stages are kept, run again to go on")
            raise typer.Exit(1) from None
    if json:
        out_json(summary_json(brain, summary, until))
        return
    for step, warning in summary.warnings:
        err(f"warning ({step}): {warning}")
    if not quiet:
        _tell(brain, summary, until, verbose)


def _tell(brain: Brain, summary: Summary, until: str, verbose: bool) -> None:
    from leadline.pipeline.summary import penetration_rows

    if verbose:
        out(f"done: {', '.join(summary.done) or 'nothing'}")
        out(f"unchanged: {', '.join(summary.skipped) or 'nothing'}")
    elif not summary.done:
        out("nothing has changed since the last run")
    if until == "locate" and (summary.done or verbose):
        for row in penetration_rows(brain):
            out(_told(row))
        out(f"written: {brain.out / 'channels.csv'}")


def _told(row: dict[str, Any]) -> str:
    if row["p_region"] is None:
        return f"{row['penetration']}: none of its {row['channels']} channels is located; the warnings say why"
    return (
        f"{row['penetration']}: {row['in_brain']} of {row['channels']} channels in the brain, "
        f"depth sd {row['depth_sd_um']} um, p_region {row['p_region']}; {' > '.join(row['regions'])}"
    )

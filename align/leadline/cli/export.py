"""``leadline export``."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from leadline.cli.brains import BrainArg, Json, Quiet
from leadline.cli.terminal import out, out_json, terminal_progress

if TYPE_CHECKING:
    from leadline.model.brain import Brain


class Format(StrEnum):
    """What to write."""

    nwb = "nwb"
    probeinterface = "probeinterface"
    bids = "bids"


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command()(export)


def export(
    brain: BrainArg,
    to: Annotated[Format, typer.Option("--to", help="The format.")],
    source: Annotated[
        Path | None, typer.Option("--source", help="nwb: the file whose electrodes were located.")
    ] = None,
    output: Annotated[
        Path | None, typer.Option("-o", "--output", help="nwb: the copy to write; else a folder, out/FORMAT without.")
    ] = None,
    group: Annotated[
        list[str] | None,
        typer.Option("--group", help="nwb: the electrode group of a penetration.", metavar="PENETRATION=GROUP"),
    ] = None,
    in_place: Annotated[bool, typer.Option("--in-place", help="nwb: change the source itself.")] = False,
    dry_run: Annotated[bool, typer.Option("--dry-run", help="Say what would change and write nothing.")] = False,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Write located channels into an NWB file, probe files or BIDS tables."""
    from leadline.base.errors import LeadlineError
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.finished import located

    if to is Format.nwb and source is None:
        raise LeadlineError("--source is missing", where="leadline export --to nwb", mend="Name the NWB file to copy")
    with terminal_progress(quiet or json) as progress:
        described = located(read_brain(brain), progress)
    if to is Format.nwb:
        assert source is not None
        _nwb(described, source, output, _groups(group or []), in_place, dry_run, json, quiet)
    else:
        _files(described, to, output, dry_run, json, quiet)


def _nwb(
    brain: Brain, source: Path, output: Path | None, groups: dict[str, list[str]], in_place: bool, dry_run: bool,
    json: bool, quiet: bool,
) -> None:  # fmt: skip
    from leadline.pipeline.export import export_nwb, summary_json

    summary = export_nwb(brain, source, output, groups=groups, in_place=in_place, dry_run=dry_run)
    if json:
        out_json(summary_json(summary))
    elif not quiet:
        for line in summary.matches:
            out(line)
        verb = "would change" if dry_run else "changed"
        for c in summary.changes:
            out(f"{c.column}: {'new' if c.is_new else verb}, {c.changed} electrodes; first {c.example}")
        out("nothing was written" if dry_run else f"written: {summary.output}")


def _files(brain: Brain, to: Format, output: Path | None, dry_run: bool, json: bool, quiet: bool) -> None:
    from leadline.pipeline.export import export_bids, export_probeinterface

    folder = output or brain.out / to.value
    files = (export_bids if to is Format.bids else export_probeinterface)(brain, folder, dry_run=dry_run)
    if json:
        out_json({"written": not dry_run, "files": [str(f) for f in files]})
    elif not quiet:
        for file in files:
            out(f"{'would write' if dry_run else 'written'}: {file}")


def _groups(texts: list[str]) -> dict[str, list[str]]:
    from leadline.base.errors import LeadlineError

    found: dict[str, list[str]] = {}
    for text in texts:
        name, equals, group = text.partition("=")
        if not (equals and name and group):
            raise LeadlineError(f"'{text}' names no group", where="--group", mend="Write --group PENETRATION=GROUP")
        found.setdefault(name, []).append(group)
    return found

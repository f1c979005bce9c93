"""``leadline report``."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from leadline.cli.brains import BrainArg, Json, Quiet
from leadline.cli.terminal import out, out_json, terminal_progress


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command()(report)


def report(
    brain: BrainArg,
    output: Annotated[
        Path | None, typer.Option("-o", "--output", help="The page; out/report.html beside brain.toml without.")
    ] = None,
    figures: Annotated[
        bool, typer.Option("--figures", help="Also write every section as SVG and PDF with editable text.")
    ] = False,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Make one self-contained HTML page of the brain."""
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.bench import Bench
    from leadline.pipeline.finished import located
    from leadline.report.figures import write_sections
    from leadline.report.findings import gather
    from leadline.report.page import write_report

    with terminal_progress(quiet or json) as progress:
        described = located(read_brain(brain), progress)
        findings = gather(Bench(described, progress))
        path = output or described.out / "report.html"
        size = write_report(findings, path, progress)
        drawn = write_sections(findings, path.parent / "figures") if figures else []
    if json:
        out_json({"report": str(path), "bytes": size, "figures": [str(p) for p in drawn]})
    elif not quiet:
        out(f"report: {path} ({size / 1e6:.1f} MB)")
        for figure in drawn:
            out(f"figure: {figure}")

"""``leadline learn``."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from leadline.cli.terminal import err, out


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command()(learn)


def learn(
    brains: Annotated[list[Path], typer.Argument(help="Finished brains.", metavar="BRAIN...")],
    to: Annotated[Path, typer.Option(help="The knowledge file to write.")],
) -> None:
    """Learn a lab's own knowledge from its finished brains."""
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.learning import learn_from

    learned = learn_from([read_brain(brain) for brain in brains], to)
    for warning in learned.warnings:
        err(f"warning: {warning}")
    out(
        f"{len(learned.types)} structure types from {learned.brains} brains; held-out gain "
        f"{learned.gain_nats:+.2f} nats for each feature of a type in a brain"
    )
    out(f'written: {to}; use it with [knowledge] path = "{to.name}" in brain.toml')

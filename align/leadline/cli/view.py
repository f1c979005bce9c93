"""``leadline view``."""

from __future__ import annotations

import typer

from leadline.cli.brains import BrainArg

INSTALL = "pip install 'leadline[napari]'"


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command()(view)


def view(brain: BrainArg) -> None:
    """Open the napari plugin on a brain."""
    from importlib.util import find_spec

    from leadline.base.errors import LeadlineError
    from leadline.io.brainfile import read_brain

    described = read_brain(brain)
    for package in ("napari", "pyqtgraph", "leadline_napari"):
        if find_spec(package) is None:
            raise LeadlineError(f"{package} is not installed", where="leadline view", mend=f"Install it: {INSTALL}")
    from importlib import import_module

    # Named in words, because the core knows no screen: the plugin stands above the command line.
    import_module("leadline_napari.commands").show(described.file)

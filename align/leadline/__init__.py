"""Leadline: in which brain region and layer did every channel of a silicon probe sit?

>>> import leadline
>>> leadline.open_brain("no-such-brain")
Traceback (most recent call last):
leadline.base.errors.LeadlineError: no-such-brain: there is no such file. Name a brain.toml or the folder that holds it
"""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.pipeline.opened import OpenBrain

__version__ = "0.1.0"


def open_brain(path: str | Path) -> OpenBrain:
    """Read a ``brain.toml`` (or the one in a folder) to work on it from Python.

    Raises LeadlineError that lists every fault of the file; the brain's data are opened when they are needed.
    """
    from leadline.pipeline.opened import OpenBrain

    return OpenBrain.at(path)

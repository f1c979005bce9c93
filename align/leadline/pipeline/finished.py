"""Brains whose channels are located and up to date: what units, reports, exports and comparisons stand on."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline.base.progress import SILENT, Progress
from leadline.pipeline.run import run, without_physiology
from leadline.pipeline.standing import standing

if TYPE_CHECKING:
    from leadline.model.brain import Brain


def located(brain: Brain, progress: Progress = SILENT) -> Brain:
    """The brain as its channel table was made, after running whatever is missing or out of date.

    A table made with ``--no-physiology`` is kept as it is while its inputs are unchanged; nothing is then run.
    """
    for asked in (brain, without_physiology(brain)):
        if is_current(asked):
            return asked
    run(brain, progress=progress)
    return brain


def is_current(brain: Brain) -> bool:
    """Whether every step up to the channel table has been done with these very inputs and settings."""
    return all(step.state == "done" for step in standing(brain))

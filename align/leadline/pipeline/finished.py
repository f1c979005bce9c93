"""Brains whose channels are located and up to date: what units, reports, exports and comparisons stand on."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline.base.fingerprint import fingerprint_path
from leadline.base.progress import SILENT, Progress
from leadline.pipeline.record import Record
from leadline.pipeline.run import _key, _needed, _short, run, without_physiology
from leadline.pipeline.stages import plan

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.model.brain import Brain


def located(brain: Brain, progress: Progress = SILENT, threads: int = 2) -> Brain:
    """The brain as its channel table was made, after running whatever is missing or out of date.

    A table made with ``--no-physiology`` is kept as it is while its inputs are unchanged; nothing is then run.
    """
    for asked in (brain, without_physiology(brain)):
        if is_current(asked):
            return asked
    run(brain, progress=progress, threads=threads)
    return brain


def is_current(brain: Brain) -> bool:
    """Whether every step up to the channel table has been done with these very inputs and settings."""
    record = Record(brain.folder, brain.cache)
    marks: dict[Path, str] = {}
    for step in _needed(plan(brain, record), "locate"):
        done = record.steps.get(step.name)
        if done is None or not all(name in record.steps for name in step.needs):
            return False
        inputs = {str(_short(path, brain)): marks.setdefault(path, fingerprint_path(path)) for path in step.reads}
        if done.key != _key(step, inputs, record) or not done.intact(brain.folder):
            return False
    return True

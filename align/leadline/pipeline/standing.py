"""How far a brain has come: which steps are done, which are out of date, which are still to do."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from leadline.base.fingerprint import fingerprint_path
from leadline.pipeline.record import Record
from leadline.pipeline.run import _key, _short
from leadline.pipeline.stages import plan

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.model.brain import Brain


@dataclass(frozen=True, slots=True)
class Standing:
    """One step. ``state`` : 'done'; 'changed' where inputs, settings or files are not what they were; 'missing'."""

    step: str
    stage: str
    state: str
    warnings: tuple[str, ...] = ()


def standing(brain: Brain) -> tuple[Standing, ...]:
    """The state of every step of a brain, in order; reads the inputs' fingerprints and runs nothing."""
    record = Record(brain.folder, brain.cache)
    marks: dict[Path, str] = {}
    states: dict[str, str] = {}
    found = []
    for step in plan(brain, record):
        done = record.steps.get(step.name)
        if done is None:
            state = "missing"
        elif any(states[name] != "done" for name in step.needs):
            state = "changed"
        else:
            inputs = {str(_short(path, brain)): marks.setdefault(path, fingerprint_path(path)) for path in step.reads}
            same = done.key == _key(step, inputs, record) and done.intact(brain.folder)
            state = "done" if same else "changed"
        states[step.name] = state
        found.append(Standing(step.name, step.stage, state, done.warnings if done else ()))
    return tuple(found)

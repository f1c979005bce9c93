"""Edits of the anchors in force: accepting what the recording suggests."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from leadline.base.errors import LeadlineError
from leadline.model.anchor import Anchor, in_order
from leadline.pipeline.in_force import anchors_in_force, write_in_force
from leadline.pipeline.lock import sole_worker
from leadline.pipeline.record import Record

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.model.anchor import Suggestion
    from leadline.model.brain import Brain


def accept(brain: Brain, choices: Sequence[str]) -> tuple[Anchor, ...]:
    """Make suggestions anchors, ``source`` 'auto'; ``choices`` are row numbers from 1, landmarks, or 'all'.

    Raises LeadlineError when a choice names no suggestion, or an accepted one would cross an anchor in force.
    """
    from leadline.io.tables import read_suggestions

    suggestions = read_suggestions(brain.out / "suggestions.csv")
    if not suggestions:
        where = str(brain.out / "suggestions.csv")
        raise LeadlineError("there are no open suggestions", where=where, mend="Run 'leadline anchor' first")
    chosen = dict.fromkeys(s for choice in choices for s in _named(suggestions, choice))
    new = tuple(replace(s.anchor, source="auto") for s in chosen)
    with sole_worker(brain.file):
        record = Record(brain.folder, brain.cache)
        before = anchors_in_force(brain, record)
        in_force = (*before, *(a for a in new if a not in before))  # again after a crash: it is there already
        for p, shank in sorted({(a.penetration, a.shank) for a in new}):
            in_order(a for a in in_force if (a.penetration, a.shank) == (p, shank))
        write_in_force(brain, record, in_force)
    return new


def _named(suggestions: Sequence[Suggestion], choice: str) -> list[Suggestion]:
    if choice == "all":
        return list(suggestions)
    if choice.isdigit() and 1 <= int(choice) <= len(suggestions):
        return [suggestions[int(choice) - 1]]
    found = [s for s in suggestions if s.anchor.landmark.casefold() == choice.casefold()]
    if not found:
        known = "; ".join(f"{i}: {s.anchor.penetration} {s.anchor.landmark}" for i, s in enumerate(suggestions, 1))
        raise LeadlineError(f"'{choice}' names no suggestion", where="--accept", mend=f"Open are {known}")
    return found

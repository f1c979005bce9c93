"""Undo and redo without limit, as tuples; and as lines of text that survive a restart."""

from __future__ import annotations

import dataclasses
import json
from dataclasses import dataclass
from typing import Any

from leadline.model.anchor import Anchor
from leadline_napari.session import Edits, Pair, TrackEdit


@dataclass(frozen=True, slots=True)
class History:
    """All that was and, after an undo, all that would be again. ``past`` and ``future`` : nearest last."""

    now: Edits
    past: tuple[Edits, ...] = ()
    future: tuple[Edits, ...] = ()

    def do(self, edits: Edits) -> History:
        """Go on to ``edits``; what was undone is forgotten."""
        return History(edits, (*self.past, self.now))

    def undo(self) -> History:
        """One step back, where there is one."""
        if not self.past:
            return self
        return History(self.past[-1], self.past[:-1], (*self.future, self.now))

    def redo(self) -> History:
        """One step forward again, where there is one."""
        if not self.future:
            return self
        return History(self.future[-1], (*self.past, self.now), self.future[:-1])


def line_of(edits: Edits) -> str:
    """One line of the journal that goes on to ``edits``."""
    return json.dumps({"do": dataclasses.asdict(edits)}, ensure_ascii=False)


UNDO = json.dumps({"undo": True})
REDO = json.dumps({"redo": True})


def replay(lines: list[str]) -> History | None:
    """The history that a journal tells, None where it tells nothing; a last line cut short by a crash is left out."""
    history: History | None = None
    for number, line in enumerate(lines, 1):
        try:
            content = json.loads(line)
        except json.JSONDecodeError:
            if number == len(lines):
                break
            raise
        if "do" in content:
            edits = _edits(content["do"])
            history = History(edits) if history is None else history.do(edits)
        elif history is not None:
            history = history.undo() if "undo" in content else history.redo()
    return history


def _edits(content: dict[str, Any]) -> Edits:
    return Edits(
        anchors=tuple(Anchor(**row) for row in content["anchors"]),
        tracks=tuple(
            TrackEdit(
                row["penetration"],
                row["shank"],
                tuple(_point(p) for p in row["points_um"]),
                bool(row.get("entry_set", False)),
            )
            for row in content["tracks"]
        ),
        refused=tuple((p, int(s), landmark) for p, s, landmark in content["refused"]),
        pairs=tuple(Pair(_point(row["stack_um"]), _point(row["atlas_um"])) for row in content["pairs"]),
    )


def _point(values: list[float]) -> tuple[float, float, float]:
    a, b, c = values
    return float(a), float(b), float(c)

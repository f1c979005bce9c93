"""The desk: one brain's session. Actions come in, are saved, and everyone who listens is told."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Protocol

from leadline_napari.history import REDO, UNDO, History, line_of
from leadline_napari.session import Action, Selection, Session, TakeOver, reduce
from leadline_napari.store import ChangedOutside, Store

if TYPE_CHECKING:
    from collections.abc import Callable

    from leadline.model.brain import Brain


class Runner(Protocol):
    """Does work away from the screen and hands the answer back on it."""

    def submit(
        self, name: str, compute: Callable[[], object], done: Callable[[object], None], failed: Callable[[str], None]
    ) -> None:
        """Compute; a newer piece of work of the same ``name`` makes this one's answer stale, and it is dropped."""


class Desk:
    """Holds the session of one brain; the only place that changes it.

    ``act``, ``undo`` and ``redo`` raise LeadlineError when an edit cannot be made; nothing has changed then.
    """

    def __init__(self, brain: Brain) -> None:
        self.brain = brain
        self.store = Store(brain)
        self.history: History = self.store.open()
        self.session = Session(self.history.now, Selection(), brain.anchors)
        self._listeners: list[Callable[[Session, Session], None]] = []

    def listen(self, listener: Callable[[Session, Session], None]) -> None:
        """Call ``listener(before, after)`` after every change."""
        self._listeners.append(listener)

    def act(self, action: Action) -> None:
        """Do one thing; an edit is on disk when this returns."""
        after = reduce(self.session, action)
        if after.edits != self.session.edits:
            self._keep(self.history.do(after.edits), line_of(after.edits))
        self._tell(after)

    @property
    def can_undo(self) -> bool:
        """Whether there is a step back."""
        return bool(self.history.past)

    @property
    def can_redo(self) -> bool:
        """Whether there is a step forward."""
        return bool(self.history.future)

    def undo(self) -> None:
        """One step back."""
        if self.can_undo:
            self._keep(self.history.undo(), UNDO)
            self._tell(reduce(self.session, TakeOver(self.history.now)))

    def redo(self) -> None:
        """One step forward."""
        if self.can_redo:
            self._keep(self.history.redo(), REDO)
            self._tell(reduce(self.session, TakeOver(self.history.now)))

    def reload(self, brain: Brain | None = None) -> None:
        """Read the files again, as after a run or when another program changed them."""
        if brain is not None:
            self.brain, self.store = brain, Store(brain)
        self.history = self.store.open()
        after = reduce(replace(self.session, fixed=self.brain.anchors), TakeOver(self.history.now))
        self._tell(after)

    def _keep(self, history: History, line: str) -> None:
        try:
            self.store.keep(history.now, line)
        except ChangedOutside:
            self.reload()
            raise
        self.history = history

    def _tell(self, after: Session) -> None:
        before, self.session = self.session, after
        if after != before:
            for listener in self._listeners:
                listener(before, after)

"""Progress that is handed in from the edge: the core reports and asks whether to go on, and knows no screen."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol, TypeVar

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator

T = TypeVar("T")


class Cancelled(Exception):
    """The user asked to stop; nothing half-done is kept."""


class Progress(Protocol):
    """What long work reports to. ``step`` may raise :class:`Cancelled`."""

    def begin(self, label: str, total: float) -> None:
        """Start a piece of work of ``total`` steps."""

    def step(self, amount: float = 1.0) -> None:
        """Say that ``amount`` steps are done; raises Cancelled when the user asked to stop."""

    def say(self, message: str) -> None:
        """Tell the user something worth knowing (a choice made, a warning)."""


class Silent:
    """Reports to nobody."""

    def begin(self, label: str, total: float) -> None:
        """Do nothing."""

    def step(self, amount: float = 1.0) -> None:
        """Do nothing."""

    def say(self, message: str) -> None:
        """Do nothing."""


SILENT = Silent()


def tracked(items: Iterable[T], progress: Progress, label: str, total: float) -> Iterator[T]:
    """Yield ``items``, one step of progress after each."""
    progress.begin(label, total)
    for item in items:
        yield item
        progress.step()

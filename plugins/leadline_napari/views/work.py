"""Work away from the screen: threads with tickets, and progress in napari's own activity dock."""

from __future__ import annotations

import threading
import time
from concurrent.futures import Future, ThreadPoolExecutor
from typing import TYPE_CHECKING

from qtpy.QtCore import QObject, Signal

from leadline.base.errors import LeadlineError
from leadline.base.progress import Cancelled

if TYPE_CHECKING:
    from collections.abc import Callable

SHOW_EVERY_S = 0.05
BAR_STEPS = 1000  # the activity dock counts in whole numbers


class QtRunner(QObject):
    """Computes in threads, answers on the screen's thread; of each name only the newest answer counts.

    A LeadlineError reaches ``failed`` as words; anything else is our fault and reaches the exception hook.
    """

    _arrived = Signal(str, int, object, object, object)
    idle = Signal()

    def __init__(self, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._pool = ThreadPoolExecutor(max_workers=2, thread_name_prefix="leadline")
        self._tickets: dict[str, int] = {}
        self._waiting: dict[str, Future[object]] = {}
        self._arrived.connect(self._settle)

    @property
    def busy(self) -> bool:
        """Whether any answer is still awaited."""
        return bool(self._waiting)

    def submit(
        self, name: str, compute: Callable[[], object], done: Callable[[object], None], failed: Callable[[str], None]
    ) -> None:
        """Compute ``name``; earlier work of that name that has not begun is not begun, and its answer dropped."""
        ticket = self._tickets[name] = self._tickets.get(name, 0) + 1
        if (old := self._waiting.get(name)) is not None:
            old.cancel()
        future = self._pool.submit(compute)
        self._waiting[name] = future
        future.add_done_callback(lambda f: self._hand_over(name, ticket, f, done, failed))

    def _hand_over(self, name: str, ticket: int, future: Future[object], done: object, failed: object) -> None:
        if not future.cancelled():
            self._arrived.emit(name, ticket, future, done, failed)

    def _settle(
        self, name: str, ticket: int, future: Future[object], done: Callable[[object], None],
        failed: Callable[[str], None],
    ) -> None:  # fmt: skip
        if ticket != self._tickets[name]:
            return
        self._waiting.pop(name, None)
        try:
            found = future.result()
        except LeadlineError as error:
            failed(str(error))
        except Cancelled:
            failed("")
        else:
            done(found)
        finally:
            if not self._waiting:
                self.idle.emit()

    def close(self) -> None:
        """Let go of all work; what runs is left to end and its answer dropped."""
        for name in self._tickets:
            self._tickets[name] += 1
        self._waiting.clear()
        self._pool.shutdown(wait=True, cancel_futures=True)


class QtProgress(QObject):
    """Progress handed to the pipeline: shown in the activity dock, cancelled from there or from the Brain dock."""

    began = Signal(str, float)
    moved = Signal(float)
    said = Signal(str)

    def __init__(self, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._stop = threading.Event()
        self._done, self.total, self._shown_at = 0.0, 0.0, 0.0
        self._bar: object | None = None
        self.began.connect(self._show_begin)
        self.moved.connect(self._show_moved)

    def begin(self, label: str, total: float) -> None:
        """Start a piece of work (called in the worker's thread)."""
        self._check()
        self._done, self.total = 0.0, float(total)
        self.began.emit(label, float(total))

    def step(self, amount: float = 1.0) -> None:
        """Say that some of it is done; raises Cancelled when the user asked to stop."""
        self._check()
        self._done += amount
        now = time.monotonic()
        if now - self._shown_at > SHOW_EVERY_S:
            self._shown_at = now
            self.moved.emit(self._done)

    def say(self, message: str) -> None:
        """Tell the user something."""
        self.said.emit(message)

    def cancel(self) -> None:
        """Ask the work to stop at its next step."""
        self._stop.set()

    def _check(self) -> None:
        bar = self._bar
        if self._stop.is_set() or (bar is not None and bar.is_canceled):
            raise Cancelled

    def _show_begin(self, label: str, total: float) -> None:
        from napari.utils import cancelable_progress

        self.finish()
        self._bar = cancelable_progress(total=BAR_STEPS if total > 0 else 0, desc=label)

    def _show_moved(self, done: float) -> None:
        if self._bar is not None and self.total > 0:
            at = round(BAR_STEPS * min(done / self.total, 1.0))
            if at > self._bar.n:
                self._bar.update(int(at - self._bar.n))

    def finish(self) -> None:
        """Take the bar away."""
        if self._bar is not None:
            self._bar.close()
            self._bar = None

"""What the terminal shows: progress bars on standard error, summaries on standard output."""

from __future__ import annotations

import json
import sys
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from leadline.base.progress import SILENT, Progress

if TYPE_CHECKING:
    from collections.abc import Iterator

    from rich.progress import Progress as Bars


class TerminalProgress:
    """One bar at a time; finished ones stay as a line."""

    def __init__(self, bars: Bars) -> None:
        self.bars = bars
        self.task: Any = None

    def begin(self, label: str, total: float) -> None:
        """Close the bar that is open and start another; a total of 0 pulses."""
        self.end()
        self.task = self.bars.add_task(label, total=total or None)

    def step(self, amount: float = 1.0) -> None:
        """Move the bar."""
        if self.task is not None:
            self.bars.advance(self.task, amount)

    def say(self, message: str) -> None:
        """Print a line above the bar."""
        self.bars.console.print(message, markup=False, highlight=False)

    def end(self) -> None:
        """Take the open bar away."""
        if self.task is not None:
            self.bars.remove_task(self.task)
            self.task = None


@contextmanager
def terminal_progress(quiet: bool) -> Iterator[Progress]:
    """Progress on a terminal; silence elsewhere or when asked for."""
    if quiet or not sys.stderr.isatty():
        yield SILENT
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.description:<24}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bars:
        progress = TerminalProgress(bars)
        yield progress
        progress.end()


def out(text: str) -> None:
    """One line, or several, on standard output."""
    sys.stdout.write(text + "\n")


def err(text: str) -> None:
    """One line, or several, on standard error."""
    sys.stderr.write(text + "\n")


def out_json(value: Any) -> None:
    """A machine-readable summary on standard output."""
    out(json.dumps(value, indent=2, ensure_ascii=False))

"""``leadline run`` on several brains: bars while they run, a table at the end."""

from __future__ import annotations

import sys
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from leadline.cli.terminal import err, out_json
from leadline.pipeline.alone import DONE, STOPPED, WRONG, Outcome

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from leadline.pipeline.many import Watch

PLAIN_WIDTH = 160
NUMBERS = ("seconds", "channels", "warnings")


def run_brains(
    texts: Sequence[str],
    *,
    workers: int | None,
    scheduler: str | None,
    physiology: bool,
    json: bool,
    quiet: bool,
    verbose: bool,
) -> int:
    """Run the brains that paths and patterns name; returns the exit code.

    0 : all done. 2 : the input of some is wrong, and nothing else went amiss. 1 : anything else.
    """
    from leadline.pipeline.many import find_brains, run_many, usual_workers

    files = find_brains(texts)
    with _watching(files, quiet or json) as watch:
        if scheduler is None:
            workers = workers or usual_workers(len(files))
            outcomes = run_many(files, workers=workers, physiology=physiology, watch=watch)
        else:
            from leadline.pipeline.cluster import run_on_cluster

            outcomes = run_on_cluster(files, scheduler, physiology=physiology, watch=watch)
    if json:
        out_json({"brains": [_as_json(outcome) for outcome in outcomes]})
    elif not quiet:
        _table(outcomes)
    _complain(outcomes, json or quiet, verbose)
    states = {outcome.state for outcome in outcomes}
    return 0 if states == {DONE} else 2 if states <= {DONE, WRONG} else 1


def _as_json(outcome: Outcome) -> dict[str, Any]:
    return {
        "file": outcome.file,
        "brain": outcome.name,
        "state": outcome.state,
        "seconds": round(outcome.seconds, 1),
        "error": outcome.error,
    } | {key: value for key, value in outcome.told.items() if key != "brain"}


def _table(outcomes: Sequence[Outcome]) -> None:
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(box=SIMPLE_HEAD)
    for name in ("brain", "run", "unchanged", "seconds", "channels", "warnings", "outcome"):
        table.add_column(name, justify="right" if name in NUMBERS else "left", no_wrap=name == "brain")
    for o in outcomes:
        done = o.state == DONE
        table.add_row(
            Text(o.name),
            Text(_stages(o.told["done"], o.told["skipped"]) if done else "-"),
            Text(_stages(o.told["skipped"], o.told["done"]) if done else "-"),
            f"{o.seconds:.0f}",
            str(o.channels) if done else "-",
            str(len(o.told.get("warnings", ()))) if done else "-",
            "done" if done else Text(f"{o.state}: {o.error}", style="red"),
        )
    Console(width=None if sys.stdout.isatty() else PLAIN_WIDTH).print(table)


def _stages(steps: Sequence[str], others: Sequence[str]) -> str:
    """Stages of ``steps``, in words."""
    if not steps or not others:
        return "all" if steps else "none"
    return ", ".join(dict.fromkeys(step.split()[0] for step in steps))


def _complain(outcomes: Sequence[Outcome], untabled: bool, verbose: bool) -> None:
    """Errors where no table showed them, what a crash wrote, and the warnings: all, or how many."""
    for o in outcomes:
        if untabled and o.state != DONE:
            err(f"leadline: {o.name}: {o.error}")
        for row in o.told.get("warnings", ()) if verbose else ():
            err(f"warning ({o.name}, {row['step']}): {row['warning']}")
    for details in dict.fromkeys(o.details for o in outcomes if o.details):
        err(details.rstrip("\n"))
        err("leadline: this is a fault of Leadline; please report the lines above")
    warned = sum(len(o.told.get("warnings", ())) for o in outcomes)
    if warned and not verbose and not untabled:
        err(f"{warned} warnings; -v shows them, and they stand in each brain's out/provenance.json")
    if any(o.state == STOPPED for o in outcomes):
        err("leadline: stopped; finished stages are kept, run again to go on")


@contextmanager
def _watching(files: Sequence[str], quiet: bool) -> Iterator[Watch]:
    """On a terminal a bar for all and one for each brain that runs; elsewhere a line when one has ended."""
    if quiet:
        yield lambda _file, _event: None
    elif not sys.stderr.isatty():
        yield _Lines(len(files)).hear
    else:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

        columns = (TextColumn("{task.description:<32}"), BarColumn(), TimeElapsedColumn())
        with Progress(*columns, console=Console(stderr=True), transient=True) as bars:
            yield _Bars(bars, len(files)).hear


class _Lines:
    """Says which brain has ended, and how."""

    def __init__(self, total: int) -> None:
        self.total, self.ended = total, 0

    def hear(self, _file: str, event: dict[str, Any]) -> None:
        """Count the brains that have ended."""
        if "outcome" in event:
            self.ended += 1
            outcome = event["outcome"]
            err(f"{outcome.name}: {outcome.state} after {outcome.seconds:.0f} s ({self.ended} of {self.total})")


class _Bars:
    """A bar for each brain that runs, below one for all."""

    def __init__(self, bars: Any, total: int) -> None:
        self.bars, self.total, self.ended = bars, total, 0
        self.all = bars.add_task(f"brains (0 of {total})", total=total)
        self.names: dict[str, str] = {}
        self.tasks: dict[str, Any] = {}

    def hear(self, file: str, event: dict[str, Any]) -> None:
        """Move, begin or take away a brain's bar."""
        name = self.names.setdefault(file, event.get("name", file))
        if "begin" in event:
            self._close(file)
            self.tasks[file] = self.bars.add_task(f"{name}: {event['begin']}", total=event["total"] or None)
        elif "step" in event and file in self.tasks:
            self.bars.advance(self.tasks[file], event["step"])
        elif "outcome" in event:
            self._close(file)
            self.ended += 1
            self.bars.update(self.all, advance=1, description=f"brains ({self.ended} of {self.total})")
            if event["outcome"].state != DONE:
                said = f"{event['outcome'].name}: {event['outcome'].error}"
                self.bars.console.print(said, markup=False, highlight=False)

    def _close(self, file: str) -> None:
        if file in self.tasks:
            self.bars.remove_task(self.tasks.pop(file))

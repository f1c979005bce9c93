"""Many brains: found by patterns, run side by side on this machine; one brain's failure stops no other."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor, as_completed
from contextlib import contextmanager
from functools import partial
from glob import glob
from pathlib import Path
from threading import Event
from typing import TYPE_CHECKING, Any, TypeAlias

from leadline.base.errors import LeadlineError
from leadline.pipeline.alone import FAILED, STOPPED, Outcome, run_alone

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Sequence

Watch: TypeAlias = "Callable[[str, dict[str, Any]], None]"
"""Hears, from any thread, of a brain (its file) what its process tells, and ``{"outcome": Outcome}`` at its end."""

BRAIN_GB = 3.0
NOT_BEGUN = "not begun"


def is_pattern(text: str) -> bool:
    """Whether ``text`` stands for brains to be looked for, and is no path of its own."""
    return any(sign in text for sign in "*?[") and not Path(text).exists()


def find_brains(texts: Sequence[str]) -> tuple[str, ...]:
    """The ``brain.toml`` files that paths and patterns name, each once, patterns in order of names.

    Of what a pattern matches, files and folders that hold a ``brain.toml`` count. A path stands as it is, so that one
    that is wrong is told of when its turn comes.

    Raises LeadlineError when a pattern matches no brain.
    """
    found: list[Path] = []
    for text in texts:
        if not is_pattern(text):
            path = Path(text)
            found.append(path / "brain.toml" if path.is_dir() else path)
            continue
        matches = (Path(name) for name in sorted(glob(str(Path(text).expanduser()), recursive=True)))
        brains = [path / "brain.toml" if path.is_dir() else path for path in matches]
        brains = [path for path in brains if path.suffix == ".toml" and path.is_file()]
        if not brains:
            mend = "It must match brain.toml files or their folders"
            raise LeadlineError("matches no brain", where=f"'{text}'", mend=mend)
        found += brains
    return tuple(dict.fromkeys(str(path.resolve()) for path in found))


def cores() -> int:
    """Processors that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def usual_workers(brains: int) -> int:
    """As many brains at once as there are, as processors allow, and as memory of 3 GB for each allows."""
    memory_gb = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e9
    return max(1, min(brains, cores(), int(memory_gb / BRAIN_GB)))


def run_many(files: Sequence[str], *, workers: int, physiology: bool, watch: Watch) -> tuple[Outcome, ...]:
    """Run brains side by side, each in a process of its own, ``workers`` at once; outcomes in the order of ``files``.

    At Ctrl-C those that run are stopped between two whole files, and the others are not begun.
    """
    threads = max(1, cores() // workers)
    ended = Event()
    with stopping_pipe() as (stop, end), ThreadPoolExecutor(workers) as pool:

        def begin(file: str) -> Outcome:
            if ended.is_set():
                return Outcome(file, STOPPED, error=NOT_BEGUN)
            return run_alone(file, physiology=physiology, threads=threads, stop=stop, watch=partial(watch, file))

        def stop_all() -> None:
            ended.set()
            end()

        return gathered({pool.submit(begin, file): file for file in files}, as_completed, stop_all, watch)


def gathered(
    tasks: dict[Any, str], completed: Callable[[Any], Iterable[Any]], stop_all: Callable[[], None], watch: Watch
) -> tuple[Outcome, ...]:
    """Outcomes of futures as they come, in the order of ``tasks``.

    At Ctrl-C ``stop_all`` is called, after which every future is expected to end soon.
    """
    outcomes: dict[str, Outcome] = {}

    def collect() -> None:
        for task in completed([task for task, file in tasks.items() if file not in outcomes]):
            outcomes[tasks[task]] = outcome = _outcome(tasks[task], task)
            watch(outcome.file, {"outcome": outcome})

    try:
        collect()
    except KeyboardInterrupt:
        stop_all()
        collect()
    return tuple(outcomes[file] for file in tasks.values())


def _outcome(file: str, task: Any) -> Outcome:
    """What a future gave; that its process could not be started or its machine was lost is an outcome too."""
    error = task.exception()
    outcome: Outcome = (
        task.result() if error is None else Outcome(file, FAILED, error=f"{type(error).__name__}: {error}")
    )
    return outcome


@contextmanager
def stopping_pipe() -> Iterator[tuple[int, Callable[[], None]]]:
    """The end of a pipe to read from, and what ends it; it ends too when this process does."""
    reading, writing = os.pipe()
    ends = {writing}

    def end() -> None:
        while ends:
            os.close(ends.pop())

    try:
        yield reading, end
    finally:
        end()
        os.close(reading)

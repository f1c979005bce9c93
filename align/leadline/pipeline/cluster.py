"""Many brains on the workers of a dask.distributed scheduler; every path must mean the same file to all of them."""

from __future__ import annotations

import time
from contextlib import contextmanager
from pathlib import Path
from threading import Thread
from typing import TYPE_CHECKING, Any
from uuid import uuid4

from leadline.base.errors import LeadlineError
from leadline.pipeline.alone import STOPPED, Outcome, run_alone
from leadline.pipeline.many import NOT_BEGUN, Watch, cores, gathered, stopping_pipe

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

ANSWER_WITHIN_S = 15.0
LOOK_EVERY_S = 1.0
MEND = "Start one with 'dask scheduler --scheduler-file FILE.json' and name its address or FILE.json"


def run_on_cluster(files: Sequence[str], scheduler: str, *, physiology: bool, watch: Watch) -> tuple[Outcome, ...]:
    """Run brains on a cluster, one for each thread of its workers; outcomes in the order of ``files``.

    ``scheduler`` : its address (``tcp://host:8786``), or the ``.json`` file that ``dask scheduler --scheduler-file``
    writes, which is waited for.

    Raises LeadlineError when dask.distributed is not installed or nobody answers at ``scheduler``.
    """
    with _connected(scheduler) as client:
        from distributed import Event, as_completed

        topic = f"leadline-{uuid4().hex}"
        ended = Event(topic, client=client)
        client.subscribe_topic(topic, lambda said: watch(*said[1]))
        tasks = {
            client.submit(_run_there, file, physiology, topic, key=f"{topic}-{k}", pure=False): file
            for k, file in enumerate(files)
        }
        return gathered(tasks, as_completed, ended.set, watch)


@contextmanager
def _connected(scheduler: str) -> Iterator[Any]:
    try:
        from distributed import Client
    except ModuleNotFoundError as error:
        mend = "Install it: pip install 'leadline[cluster]'"
        raise LeadlineError("dask.distributed is not installed", where="--scheduler", mend=mend) from error
    where = {"address": scheduler}
    if scheduler.endswith(".json"):
        _wait_for(Path(scheduler))
        where = {"scheduler_file": scheduler}
    try:
        client = Client(**where, timeout=ANSWER_WITHIN_S)
    except (OSError, ValueError) as error:
        raise LeadlineError(
            f"no scheduler answers at '{scheduler}' ({error})", where="--scheduler", mend=MEND
        ) from error
    with client:
        yield client


def _wait_for(file: Path) -> None:
    """Give a scheduler that was started a moment ago the time to write its file."""
    until_s = time.monotonic() + ANSWER_WITHIN_S
    while not file.is_file():
        if time.monotonic() > until_s:
            raise LeadlineError(f"'{file}' has not come to be", where="--scheduler", mend=MEND)
        time.sleep(0.2)


def _run_there(file: str, physiology: bool, topic: str) -> Outcome:
    """On a worker: run one brain in a child process; its progress goes to whoever listens to ``topic``."""
    from distributed import Event, get_worker

    worker = get_worker()
    ended = Event(topic)
    if ended.is_set():
        return Outcome(file, STOPPED, error=NOT_BEGUN)
    threads = max(1, cores() // worker.state.nthreads)
    with stopping_pipe() as (stop, end):
        over = [False]

        def listen() -> None:
            while not over[0]:
                if ended.is_set():
                    end()
                    return
                time.sleep(LOOK_EVERY_S)

        Thread(target=listen, daemon=True).start()
        try:
            return run_alone(
                file,
                physiology=physiology,
                threads=threads,
                stop=stop,
                watch=lambda event: worker.log_event(topic, (file, event)),
            )
        finally:
            over[0] = True

"""What benchmarks stand on: a callable measured in a fresh process, a row of the table, a ratio in one process.

How to add one: write ``tests/benchmarks/bench_NAME.py`` with a function ``rows()`` that yields :class:`Row` values, and
run it with ``python -m tests.benchmarks NAME`` (``make bench`` runs all). A bench looks like this:

    from tests.benchmarks.frame import Row, best, in_child

    def measure(megabytes: float) -> dict[str, float]:     # runs in a fresh child; arguments and answer are JSON
        block = np.ones(...)
        ours_s = best(lambda: our_sum(block))
        theirs_s = best(lambda: np.sum(block))
        return {"ours_s": ours_s, "theirs_s": theirs_s}

    def rows():
        for megabytes in (64, 128, 256):                    # three sizes or more are drawn as a curve
            cost = in_child(measure, megabytes=megabytes)
            a = cost.answer
            yield Row("sum of a block", megabytes, "MB", a["ours_s"], a["theirs_s"], bar=1.5,
                      reference="numpy.sum", peak_mb=cost.peak_mb, peak_bar_mb=1000)

Costs are CPU seconds (user and system, children included), because walls are shared; the reference is measured in the
same process as our work; what a child held when it was asked is read from the kernel, so a child starts small.
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from importlib import import_module
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

ROOT = Path(__file__).parents[2]
THREADS = (
    "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS",
    "ITK_GLOBAL_DEFAULT_NUMBER_OF_THREADS",
)  # fmt: skip
MB = 1e6


@dataclass(frozen=True, slots=True)
class Cost:
    """What a child used. ``peak_mb`` : most memory held at once (resident), of the child and of its largest child."""

    cpu_s: float
    wall_s: float
    peak_mb: float
    answer: Any


@dataclass(frozen=True, slots=True)
class Row:
    """One line of the table.

    ``work``, ``size``, ``unit`` : what was done to how much; rows of one work and three sizes or more are a curve.
    ``ours``, ``theirs`` : CPU seconds (or what ``measured`` says), ``theirs`` None where there is no reference.
    ``bar`` : what ours / theirs must not exceed; with ``at_least`` what theirs / ours must reach.
    ``holds`` : a check of the answer itself (equal to the reference), False fails the row.
    """

    work: str
    size: float
    unit: str
    ours: float
    theirs: float | None = None
    bar: float | None = None
    at_least: bool = False
    reference: str = ""
    peak_mb: float | None = None
    peak_bar_mb: float | None = None
    measured: str = "CPU s"
    note: str = ""
    holds: bool = True

    @property
    def ratio(self) -> float | None:
        """Ours over theirs, or theirs over ours where more is better."""
        if self.theirs is None:
            return None
        return self.theirs / self.ours if self.at_least else self.ours / self.theirs

    @property
    def met(self) -> bool | None:
        """Whether every bar of the row is met; None where it has none."""
        met = [self.holds] if not self.holds else []
        if self.bar is not None and self.ratio is not None:
            met.append(self.ratio >= self.bar if self.at_least else self.ratio <= self.bar)
        if self.peak_bar_mb is not None and self.peak_mb is not None:
            met.append(self.peak_mb <= self.peak_bar_mb)
        return all(met) if met else None


def in_child(function: Callable[..., Any], *, threads: int = 1, python: str = sys.executable, **arguments: Any) -> Cost:
    """Run ``function(**arguments)`` of an importable module in a fresh process; arguments and answer are JSON.

    ``python`` : the interpreter, where a reference needs an environment of its own.

    Raises RuntimeError when the child fails; what it said stands on standard error.
    """
    environment = os.environ | dict.fromkeys(THREADS, str(threads))
    with TemporaryDirectory() as folder:
        answer = Path(folder) / "cost.json"
        call = json.dumps([function.__module__, function.__qualname__, arguments])
        command = [python, "-m", "tests.benchmarks.frame", str(answer), call]
        if subprocess.run(command, cwd=ROOT, env=environment, stdout=sys.stderr, check=False).returncode:
            raise RuntimeError(f"{function.__module__}.{function.__qualname__} failed")
        return Cost(**json.loads(answer.read_text()))


def best(work: Callable[[], Any], repeats: int = 3) -> float:
    """The fewest CPU seconds of this process, its threads and children, in which ``work`` was done."""
    return min(timed(work)[0] for _ in range(repeats))


def timed(work: Callable[[], Any]) -> tuple[float, Any]:
    """CPU seconds of this process, its threads and its ended children during ``work``, and its answer."""
    start = _cpu_s()
    answer = work()
    return _cpu_s() - start, answer


def peak_mb() -> float:
    """The most memory that this process has held, in MB."""
    for line in Path("/proc/self/status").read_text().splitlines() if sys.platform == "linux" else ():
        if line.startswith("VmHWM:"):
            return int(line.split()[1]) * 1024 / MB
    # elsewhere: kilobytes, on macOS bytes
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024) / MB


def _cpu_s() -> float:
    ended = resource.getrusage(resource.RUSAGE_CHILDREN)
    return time.process_time() + ended.ru_utime + ended.ru_stime


def _child(answer: str, call: str) -> None:
    module, name, arguments = json.loads(call)
    function = getattr(import_module(module), name)
    wall = time.perf_counter()
    cpu_s, value = timed(lambda: function(**arguments))
    scale = 1 if sys.platform == "darwin" else 1024
    children_mb = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss * scale / MB
    cost = {"cpu_s": cpu_s, "wall_s": time.perf_counter() - wall, "peak_mb": max(peak_mb(), children_mb)}
    Path(answer).write_text(json.dumps(cost | {"answer": value}))


if __name__ == "__main__":
    _child(*sys.argv[1:])

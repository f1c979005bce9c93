"""One brain in a process of its own: ``python -m leadline.pipeline.alone``, and the side that starts it.

A process per brain keeps a crash, a leak or a full memory to the brain it belongs to. The child tells its progress and
at last its ending as lines of JSON on standard output, and stops when its standard input ends: then the one who
started it has asked it to, or is gone.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from tempfile import TemporaryFile
from typing import IO, TYPE_CHECKING, Any

from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Callable
    from types import TracebackType

THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")
SAY_EVERY_S = 0.2
DONE, WRONG, FAILED, STOPPED = "done", "wrong", "failed", "stopped"
STOPPED_WORDS = "finished stages are kept"


@dataclass(frozen=True, slots=True)
class Outcome:
    """How one brain of many went.

    ``state`` : 'done'; 'wrong', the input; 'failed', anything else; 'stopped' by the user, or not begun. ``error`` :
    in words. ``details`` : what its process wrote when it crashed. ``told`` : as ``--json`` of one brain.
    """

    file: str
    state: str
    seconds: float = 0.0
    error: str = ""
    details: str = ""
    told: dict[str, Any] = field(default_factory=dict)

    @property
    def name(self) -> str:
        """Of the brain, or of its folder where it could not be read."""
        path = Path(self.file)
        return str(self.told.get("brain") or (path.parent.name if path.name == "brain.toml" else path.name))

    @property
    def channels(self) -> int:
        """How many channels have a row."""
        return sum(row["channels"] for row in self.told.get("penetrations", ()))


def run_alone(
    file: str, *, physiology: bool, threads: int, stop: int, watch: Callable[[dict[str, Any]], None]
) -> Outcome:
    """Run one brain in a child process and wait for it.

    Parameters
    ----------
    threads : how many each library may start.
    stop : a file descriptor, the reading end of a pipe; the child stops when its writing end is closed.
    watch : hears of the child's progress.
    """
    cap = {name: str(min(threads, _given(name, threads))) for name in THREAD_VARIABLES}
    command = [sys.executable, "-m", "leadline.pipeline.alone", file, "" if physiology else "--no-physiology"]
    start = time.monotonic()
    name = ""
    ending: dict[str, Any] = {}
    with TemporaryFile("w+") as said:
        child = subprocess.Popen(
            command,
            stdin=stop,
            stdout=subprocess.PIPE,
            stderr=said,
            text=True,
            env=os.environ | cap,
            start_new_session=True,  # Ctrl-C reaches the one who started it, who ends all in order
        )
        for line in child.stdout or ():
            event = json.loads(line)
            name, ending = event.get("name", name), event.get("ending", ending)
            watch(event)
        code = child.wait()
        seconds = time.monotonic() - start
        said.seek(0)
        return _outcome(file, name, seconds, ending, code, said.read())


def _outcome(file: str, name: str, seconds: float, ending: dict[str, Any], code: int, said: str) -> Outcome:
    """What a child told at its end, or why it ended without a word."""
    told = {"brain": name} | ending.get("told", {})
    if ending:
        details = said if "Traceback" in said else ""
        return Outcome(file, ending["state"], seconds, ending.get("error", ""), details, told)
    if code == -signal.SIGINT:
        return Outcome(file, STOPPED, seconds, STOPPED_WORDS, told=told)
    hint = "; most often memory ran out: use fewer --workers" if code == -signal.SIGKILL else ""
    reason = f"its process was ended by signal {-code}{hint}" if code < 0 else f"its process ended with code {code}"
    return Outcome(file, FAILED, seconds, reason, said, told)


def _given(name: str, default: int) -> int:
    text = os.environ.get(name, "")
    return int(text) if text.isdigit() and int(text) else default


class _Telling:
    """Progress as lines of JSON, a few a second at most."""

    def __init__(self, stream: IO[str]) -> None:
        self.stream = stream
        self.amount, self.last_s = 0.0, 0.0

    def begin(self, label: str, total: float) -> None:
        self.amount, self.last_s = 0.0, time.monotonic()
        self.tell({"begin": label, "total": total})

    def step(self, amount: float = 1.0) -> None:
        self.amount += amount
        if time.monotonic() - self.last_s > SAY_EVERY_S:
            self.tell({"step": self.amount})
            self.amount, self.last_s = 0.0, time.monotonic()

    def say(self, message: str) -> None:
        self.tell({"say": message})

    def tell(self, event: dict[str, Any]) -> None:
        self.stream.write(json.dumps(event) + "\n")
        self.stream.flush()


def _run(file: Path, physiology: bool, telling: _Telling) -> dict[str, Any]:
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.run import run, without_physiology
    from leadline.pipeline.summary import summary_json

    brain = read_brain(file)
    telling.tell({"name": brain.name})
    summary = run(brain if physiology else without_physiology(brain), progress=telling)
    return {"state": DONE, "told": summary_json(brain, summary)}


def _end(telling: _Telling, kind: type[BaseException], error: BaseException, trace: TracebackType | None) -> None:
    """The last word of a process that an error ends; only a fault of our own is shown whole."""
    if issubclass(kind, KeyboardInterrupt):
        state, words = STOPPED, STOPPED_WORDS
    elif isinstance(error, LeadlineError):
        state, words = WRONG, str(error)
    elif isinstance(error, OSError):
        state, words = FAILED, f"{error.strerror or error}{f': {error.filename}' if error.filename else ''}"
    else:
        state, words = FAILED, f"{kind.__name__}: {(str(error).splitlines() or [''])[0]}"
        sys.__excepthook__(kind, error, trace)
    telling.tell({"ending": {"state": state, "error": words}})


def _stop_at_end(stream: IO[str]) -> None:
    """Interrupt this process when ``stream`` ends."""
    stream.read()
    os.kill(os.getpid(), signal.SIGINT)


def main(file: str, physiology: str) -> None:
    """Run one brain; standard output is kept for the lines, whatever a library prints goes to standard error."""
    lines = os.fdopen(os.dup(1), "w", encoding="utf-8")
    os.dup2(2, 1)
    signal.signal(signal.SIGINT, signal.default_int_handler)  # a shell may start what is in the background without
    threading.Thread(target=_stop_at_end, args=(sys.stdin,), daemon=True).start()
    telling = _Telling(lines)
    sys.excepthook = partial(_end, telling)
    telling.tell({"ending": _run(Path(file), physiology != "--no-physiology", telling)})


if __name__ == "__main__":
    main(*sys.argv[1:])

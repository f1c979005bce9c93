"""Processes that die at a chosen moment: at their n-th look at the file system, or after so many seconds.

Work is done in children of a process that has already imported what it needs, so that a death costs only the work
before it. The file system is watched by Python's own audit events; a library written in C that writes a file without
them is hit by the deaths that the clock chooses.
"""

from __future__ import annotations

import os
import signal
import sys
import traceback
from collections.abc import Callable

MOMENTS = (
    "open", "os.rename", "os.remove", "os.mkdir", "os.rmdir", "os.chmod", "os.truncate", "os.link", "os.utime",
    "os.listdir", "os.scandir", "shutil.rmtree", "shutil.copyfile", "tempfile.mkstemp", "tempfile.mkdtemp",
    "fcntl.flock",
)  # fmt: skip


def in_child(work: Callable[[], object], *, silent: bool = True) -> int:
    """Do ``work`` in a child; returns 0, 1 where it raised, or minus the signal that ended it."""
    sys.stdout.flush()
    sys.stderr.flush()
    pid = os.fork()
    if pid == 0:
        code = 1
        try:
            if silent:
                nothing = os.open(os.devnull, os.O_WRONLY)
                os.dup2(nothing, 1)
                os.dup2(nothing, 2)
            work()
            code = 0
        except SystemExit as stop:
            code = int(stop.code or 0)
        except BaseException:  # noqa: BLE001 - a child must never return into the test run of its parent
            traceback.print_exc()
        finally:
            os._exit(code)
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])


def at_moment(number: int, action: Callable[[], object]) -> Callable[[], int]:
    """From now on do ``action`` at the ``number``-th look at the file system; the answer counts the looks so far."""
    seen = 0

    def watch(event: str, _: object) -> None:
        nonlocal seen
        if event in MOMENTS:
            seen += 1
            if seen == number:
                action()

    sys.addaudithook(watch)
    return lambda: seen


def die() -> None:
    """Die as by ``kill -9``."""
    os.kill(os.getpid(), signal.SIGKILL)


def killed_at(moment: int, work: Callable[[], object]) -> bool:
    """Whether ``work`` came to its end before its ``moment``-th look at the file system, at which it is killed."""

    def watched() -> None:
        at_moment(moment, die)
        work()

    return _ended(in_child(watched))


def killed_after(seconds: float, work: Callable[[], object]) -> bool:
    """Whether ``work`` came to its end within ``seconds`` of its own computing time, after which it is killed."""

    def watched() -> None:
        signal.signal(signal.SIGPROF, signal.SIG_DFL)
        signal.setitimer(signal.ITIMER_PROF, seconds)  # its signal ends the process wherever it is, in C too
        work()

    return _ended(in_child(watched))


def _ended(code: int) -> bool:
    if code not in (0, -signal.SIGKILL, -signal.SIGPROF):
        raise AssertionError(f"the child ended by itself with code {code}")
    return code == 0


def looks(work: Callable[[], object]) -> int:
    """How often ``work`` looks at the file system."""
    read, write = os.pipe()

    def counted() -> None:
        seen = at_moment(0, die)
        work()
        os.write(write, str(seen()).encode())

    code = in_child(counted, silent=False)
    os.close(write)
    with os.fdopen(read) as told:
        count = told.read()
    assert code == 0
    return int(count)

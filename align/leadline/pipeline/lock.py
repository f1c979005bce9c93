"""One worker to a brain: who holds it, and since when, stands in ``.leadline/lock``.

What counts is the lock that the system gives on a file and takes back when its process dies, however it dies; so
nothing has to be mended after a crash. It is taken on ``brain.toml``, which is always there, and on ``.leadline/lock``,
so that neither an editor that replaces the one nor a hand that deletes the other lets a second worker in.
"""

from __future__ import annotations

import errno
import fcntl
import json
import os
import pwd
import time
from contextlib import contextmanager, suppress
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING

from leadline.base.atomic import NOT_WRITABLE, in_words, is_running
from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

LOCK = ".leadline/lock"
_LONGEST = 4096


@dataclass(frozen=True, slots=True)
class Owner:
    """Who works on a brain. ``since_s`` : by the clock of ``host``."""

    user: str
    host: str
    pid: int
    since_s: float

    def __str__(self) -> str:
        when = time.strftime("%Y-%m-%d %H:%M:%S", time.localtime(self.since_s))
        minutes = (time.time() - self.since_s) / 60
        if minutes < 0:  # a clock was set back
            age = ""
        elif minutes < 1:
            age = " (less than a minute)"
        else:
            age = f" ({minutes:.0f} min)" if minutes < 120 else f" ({minutes / 60:.0f} h)"
        return f"{self.user} on {self.host}, process {self.pid}, since {when}{age}"


@contextmanager
def sole_worker(brain_file: Path) -> Iterator[None]:
    """Hold the brain for this process; a second one is told who holds it instead of writing over the first.

    Raises LeadlineError when another process holds it, or when a process of another machine left its lock behind:
    whether that one is alive cannot be seen from here.
    """
    file = brain_file.parent / LOCK
    with brain_file.open("rb") as brain:
        if _take(brain.fileno()) is False:
            raise _held(brain_file, _owner(file))
        handle = _open(file, brain_file)
        if handle is None:  # nothing can be written here: nothing will be written over either
            yield
            return
        try:
            with in_words(file):
                os.ftruncate(handle, 0)
                os.write(handle, json.dumps(asdict(_me())).encode())
            yield
        finally:
            file.unlink(missing_ok=True)
            os.close(handle)
            with suppress(OSError):  # it holds other things
                file.parent.rmdir()


def _take(handle: int) -> bool | None:
    """Whether the lock was free; None on a disk that gives none."""
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError as error:  # some network disks give no locks, others only on files that are open for writing
        if error.errno not in (errno.EBADF, errno.EINVAL, errno.ENOLCK, errno.ENOSYS, errno.EOPNOTSUPP):
            raise
        return None
    return True


def _open(file: Path, brain_file: Path) -> int | None:
    """The lock file, held; None where it may not be written. Never follows a link."""
    while True:
        try:
            with in_words(file):
                file.parent.mkdir(exist_ok=True)
                handle = os.open(file, os.O_RDWR | os.O_CREAT | os.O_NOFOLLOW | os.O_CLOEXEC, 0o666)
        except FileNotFoundError:  # another process has just tidied the folder away
            continue
        except LeadlineError as error:
            if isinstance(error.__cause__, OSError) and error.__cause__.errno in NOT_WRITABLE:
                return None
            raise
        except OSError as error:
            raise LeadlineError(
                f"cannot be made ({error.strerror})", where=str(file), mend="Remove what stands there, then start again"
            ) from error
        taken = _take(handle)
        if os.fstat(handle).st_nlink:
            owner = _parse(os.pread(handle, _LONGEST, 0))
            if taken is not False and not _may_live(owner, sure=bool(taken)):
                return handle
            os.close(handle)
            raise _held(brain_file, owner, "" if taken is False else f"; if that process has ended, delete {file}")
        os.close(handle)  # its owner took it away between our opening and our locking


def _may_live(owner: Owner | None, *, sure: bool) -> bool:
    """Whether an owner who did not take the lock away may still be working. ``sure`` : the system gave us the lock."""
    if owner is None:
        return False
    return owner.host != os.uname().nodename or (not sure and owner.pid != os.getpid() and is_running(owner.pid))


def _held(brain_file: Path, owner: Owner | None, more: str = "") -> LeadlineError:
    who = f": {owner}" if owner else ""
    return LeadlineError(
        f"another Leadline process is working on this brain{who}",
        where=str(brain_file),
        mend=f"Wait until it has ended, then start again{more}",
    )


def _me() -> Owner:
    try:
        user = pwd.getpwuid(os.getuid()).pw_name
    except KeyError:  # a container's user without a name
        user = f"user {os.getuid()}"
    return Owner(user, os.uname().nodename, os.getpid(), time.time())


def _owner(file: Path) -> Owner | None:
    """The owner as the lock file says, None where it says nothing."""
    try:
        with file.open("rb") as handle:
            return _parse(handle.read(_LONGEST))
    except OSError:
        return None


def _parse(content: bytes) -> Owner | None:
    try:
        said = json.loads(content)
        return Owner(str(said["user"]), str(said["host"]), int(said["pid"]), float(said["since_s"]))
    except (ValueError, KeyError, TypeError, OverflowError, RecursionError):
        return None

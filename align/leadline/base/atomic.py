"""Files that are whole or absent: written beside, then renamed; what killed writers left is cleared away."""

from __future__ import annotations

import errno
import os
import shutil
import time
from contextlib import contextmanager
from hashlib import blake2b
from pathlib import Path
from tempfile import mkdtemp, mkstemp
from typing import TYPE_CHECKING

from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Iterator

PART, OLD = ".part-", ".old-"
LEFT_BEHIND_S = 86400.0
FULL_BELOW_BYTES = 2**16
NOT_WRITABLE = (errno.EROFS, errno.EACCES, errno.EPERM)
_ROOM = "Free some space there, then start again; what is finished is kept"
_RIGHTS = "Copy the folder to where you may write, or get the right to write here; nothing was changed"
_SAYS = {
    errno.ENOSPC: ("the disk is full", _ROOM),
    errno.EDQUOT: ("your share of the disk is used up", _ROOM),
    errno.EROFS: ("lies on a disk that can only be read", _RIGHTS),
    errno.EACCES: ("may not be written", _RIGHTS),
    errno.EPERM: ("may not be written", _RIGHTS),
    errno.ENAMETOOLONG: ("has a name that is too long for this disk", "Choose a shorter name"),
}


@contextmanager
def whole_file(path: Path) -> Iterator[Path]:
    """Give a name beside ``path`` to write to; rename it to ``path`` only when the block ends well.

    The temporary name keeps the suffixes of ``path``, because many writers choose the format by it.

    Raises LeadlineError when the disk is full or may not be written to.
    """
    path = Path(path)
    with in_words(path):
        path.parent.mkdir(parents=True, exist_ok=True)
        _tidy(path)
        handle, name = mkstemp(prefix=_mark(PART), suffix=_tail(path), dir=path.parent)
        os.close(handle)
    part = Path(name)
    try:
        with in_words(path):
            yield part
            _flush(part)
            part.chmod(0o666 & ~_umask())
            os.replace(part, path)
            _flush(path.parent)
    finally:
        part.unlink(missing_ok=True)


@contextmanager
def whole_folder(path: Path) -> Iterator[Path]:
    """Give an empty folder beside ``path`` to fill; it takes the place of ``path`` only when the block ends well.

    Raises LeadlineError when the disk is full or may not be written to.
    """
    path = Path(path)
    with in_words(path):
        path.parent.mkdir(parents=True, exist_ok=True)
        _tidy(path)
        part = Path(mkdtemp(prefix=_mark(PART), suffix=_tail(path), dir=path.parent))
    try:
        with in_words(path):
            yield part
            for file in part.rglob("*"):
                _flush(file)
            part.chmod(0o777 & ~_umask())
            if path.exists():
                _change_places(part, path)
            else:
                os.replace(part, path)
            _flush(path.parent)
    finally:
        shutil.rmtree(part, ignore_errors=True)


def write_text(path: Path, text: str) -> None:
    """Write ``text`` to ``path``, whole or not at all; leave the file untouched when it already says this."""
    path = Path(path)
    data = text.encode("utf-8")
    if path.is_file() and path.read_bytes() == data:
        return
    with whole_file(path) as part:
        part.write_bytes(data)


def sweep(folder: Path) -> None:
    """Remove what writers that were killed left below ``folder``."""
    for part in folder.rglob(f"{PART}*"):
        if _abandoned(part):
            _remove(part)


def _tidy(path: Path) -> None:
    """Clear away what killed writers of ``path`` left; put back what one of them had moved aside."""
    for left in (*path.parent.glob(f"{PART}*"), *path.parent.glob(f"{OLD}*")):
        if left.name.endswith(_tail(path)) and _abandoned(left):
            if left.name.startswith(OLD) and not path.exists():
                os.replace(left, path)
            else:
                _remove(left)


def _mark(kind: str) -> str:
    """Start of a temporary name, which says who writes."""
    return f"{kind}{_machine()}-{os.getpid()}-"


def _tail(path: Path) -> str:
    return "-" + path.name[-60:]


def _machine() -> str:
    return blake2b(os.uname().nodename.encode(), digest_size=4).hexdigest()


def _abandoned(part: Path) -> bool:
    """Whether nobody writes ``part`` any more: its process on this machine is gone, or nobody touched it for a day.

    A clock that was set does not matter: a part from the future is as far away as one from the past.
    """
    machine, _, rest = part.name.removeprefix(PART).removeprefix(OLD).partition("-")
    pid = rest.partition("-")[0]
    if machine == _machine() and pid.isdecimal() and not is_running(int(pid)):
        return True
    try:
        return abs(time.time() - part.lstat().st_mtime) > LEFT_BEHIND_S
    except FileNotFoundError:  # its writer has just finished
        return False


def is_running(pid: int) -> bool:
    """Whether this machine has a process of that number."""
    try:
        os.kill(pid, 0)
    except (ProcessLookupError, OverflowError):
        return False
    except PermissionError:
        return True
    return True


def _remove(part: Path) -> None:
    if part.is_dir() and not part.is_symlink():
        shutil.rmtree(part, ignore_errors=True)
    else:
        part.unlink(missing_ok=True)


@contextmanager
def in_words(path: Path) -> Iterator[None]:
    """Say what keeps ``path`` from being written; an error about another file passes as it is.

    Libraries written in C report a full disk in their own ways, so the disk is asked too.
    """
    try:
        yield
    except LeadlineError:
        raise
    except (OSError, RuntimeError) as error:
        code = error.errno if isinstance(error, OSError) else None
        if code not in (errno.ENOSPC, errno.EDQUOT) and shutil.disk_usage(_there(path)).free < FULL_BELOW_BYTES:
            code = errno.ENOSPC
        about = Path(os.fsdecode(getattr(error, "filename", None) or path))
        ours = code == errno.ENOSPC or about.name.startswith(PART) or about in (path, *path.parents)
        if code not in _SAYS or not ours:
            raise
        what, mend = _SAYS[code]
        raise LeadlineError(what, where=str(path), mend=mend) from error


def _there(path: Path) -> Path:
    """The nearest folder above ``path`` that exists."""
    return next(p for p in path.absolute().parents if p.exists())


def _change_places(part: Path, path: Path) -> None:
    """Let two folders change names: in one step where the system can (Linux), else in two that :func:`_tidy` mends."""
    import ctypes

    exchange = getattr(ctypes.CDLL(None), "renameat2", None)
    here, at_once = -100, 2  # AT_FDCWD, RENAME_EXCHANGE of renameat2(2)
    if exchange is not None and exchange(here, os.fsencode(part), here, os.fsencode(path), at_once) == 0:
        return
    old = Path(mkdtemp(prefix=_mark(OLD), suffix=_tail(path), dir=path.parent))
    os.replace(path, old)
    os.replace(part, path)
    shutil.rmtree(old)


def _flush(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask

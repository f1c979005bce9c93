"""Judges one case: a value or one LeadlineError, in time, in bounds, and nothing touched outside its folder."""

from __future__ import annotations

import os
import resource
import shutil
import signal
import sys
import tempfile
import traceback
import warnings
from dataclasses import dataclass
from pathlib import Path

from tests.fuzz.readers import Reader

from leadline.base.errors import LeadlineError

SECONDS = 10.0
MEMORY_BYTES = 2**30
FORBIDDEN = ("pickle.find_class", "socket.connect", "socket.getaddrinfo", "subprocess.Popen", "os.system", "os.exec",
             "os.posix_spawn", "os.fork", "urllib.Request")  # fmt: skip
WRITES = ("os.mkdir", "os.rename", "os.remove", "os.rmdir", "os.link", "os.symlink", "os.chmod", "os.truncate",
          "shutil.rmtree")  # fmt: skip


class Hang(BaseException):
    """A case took longer than a user would wait."""


class Trespass(BaseException):
    """A case touched what it must not."""


@dataclass(frozen=True)
class Finding:
    """What was wrong with a case. ``key`` : the same for the same fault."""

    key: str
    text: str


class Judge:
    """Reads cases of one reader in a folder of its own."""

    def __init__(self, reader: Reader) -> None:
        self.reader = reader
        self.folder = Path(tempfile.mkdtemp(prefix=f"leadline-fuzz-{os.getpid()}-", dir=in_memory()))
        self.good = reader.make(self.folder)
        self.file = self.folder / reader.file
        self.file.parent.mkdir(parents=True, exist_ok=True)
        self.watching = False
        self.allowed = (str(self.folder), tempfile.gettempdir(), "/dev/null")
        signal.signal(signal.SIGALRM, _hang)
        signal.signal(signal.SIGPROF, _hang)
        for good in self.good:
            found = self.look(good, seconds=300.0)  # the first may have to compile
            if found:
                raise AssertionError(f"{reader.name}: a good file fails: {found.text}")
        sys.addaudithook(self._watch)

    def close(self) -> None:
        """Take the folder away."""
        shutil.rmtree(self.folder)

    def look(self, data: bytes, *, seconds: float = SECONDS) -> Finding | None:
        """What is wrong with how ``data`` is read; None where all is well."""
        self.file.write_bytes(data)
        self.watching = True
        signal.setitimer(signal.ITIMER_PROF, seconds)  # of computing; a busy machine is no hang
        signal.setitimer(signal.ITIMER_REAL, 10 * seconds)  # of waiting
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                self.reader.read(self.folder)
        except LeadlineError as error:
            return None if str(error) else Finding("empty message", "a LeadlineError without words")
        except (Exception, Hang, Trespass) as error:  # noqa: BLE001 - that is what is looked for
            return _finding(error)
        finally:
            signal.setitimer(signal.ITIMER_PROF, 0)
            signal.setitimer(signal.ITIMER_REAL, 0)
            self.watching = False
        return None

    def _watch(self, event: str, args: tuple[object, ...]) -> None:
        if not self.watching:
            return
        if event in FORBIDDEN and not _is_numba(event):
            raise Trespass(f"{event} {args[:2]}")
        if event == "open":
            path, _, flags = (*args, None, None)[:3]
            writes = isinstance(flags, int) and flags & (os.O_WRONLY | os.O_RDWR | os.O_CREAT | os.O_TRUNC)
            if writes and isinstance(path, str | bytes):
                self._require_inside(os.fsdecode(path))
        elif event in WRITES and isinstance(args[0], str | bytes | Path):
            self._require_inside(os.fsdecode(args[0]))

    def _require_inside(self, path: str) -> None:
        real = os.path.realpath(path)
        if not real.startswith(self.allowed) and "__pycache__" not in real and "fontlist" not in real:
            raise Trespass(f"writes to {real}")


def in_memory() -> Path:
    """A folder that costs no disk, where the system has one."""
    memory = Path("/dev/shm")
    return memory if memory.is_dir() else Path(tempfile.gettempdir())


def _is_numba(event: str) -> bool:
    """Whether numba is looking up its own cache, which it keeps beside the program."""
    frame, found = sys._getframe(), False
    while event == "pickle.find_class" and frame.f_back is not None and not found:
        frame = frame.f_back
        found = "numba" in frame.f_code.co_filename
    return found


def _hang(*_: object) -> None:
    raise Hang(f"more than {SECONDS:g} s")


def _finding(error: BaseException) -> Finding:
    frames = traceback.extract_tb(error.__traceback__)
    ours = [f for f in frames if "/leadline" in f.filename and "/tests/" not in f.filename] or list(frames)
    last = frames[-1]
    where = f"{Path(ours[-1].filename).name}:{ours[-1].name} < {Path(last.filename).name}:{last.name}"
    text = "".join(traceback.format_exception(error)[-12:])
    return Finding(f"{type(error).__name__} at {where}", text)


def bound_memory() -> None:
    """Let this process grow by a gigabyte and no more."""
    with open("/proc/self/statm") as told:
        now = int(told.read().split()[0]) * resource.getpagesize()
    resource.setrlimit(resource.RLIMIT_AS, (now + MEMORY_BYTES, now + MEMORY_BYTES))

"""Files that are whole or absent: written beside, then renamed."""

from __future__ import annotations

import os
import shutil
import time
from contextlib import contextmanager
from pathlib import Path
from tempfile import mkdtemp, mkstemp
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterator

PART, OLD = ".part-", ".old-"
LEFT_BEHIND_S = 600.0


@contextmanager
def whole_file(path: Path) -> Iterator[Path]:
    """Give a name beside ``path`` to write to; rename it to ``path`` only when the block ends well.

    The temporary name keeps the suffixes of ``path``, because many writers choose the format by it.
    """
    path = Path(path)
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, name = mkstemp(prefix=PART, suffix="-" + path.name, dir=path.parent)
    os.close(handle)
    part = Path(name)
    try:
        yield part
        _flush(part)
        part.chmod(0o666 & ~_umask())
        os.replace(part, path)
        _flush(path.parent)
    finally:
        part.unlink(missing_ok=True)


@contextmanager
def whole_folder(path: Path) -> Iterator[Path]:
    """Give an empty folder beside ``path`` to fill; it takes the place of ``path`` only when the block ends well."""
    path = Path(path)
    path.parent.mkdir(parents=True, exist_ok=True)
    part = Path(mkdtemp(prefix=PART, suffix="-" + path.name, dir=path.parent))
    try:
        yield part
        part.chmod(0o777 & ~_umask())
        if path.exists():
            old = Path(mkdtemp(prefix=OLD, dir=path.parent))
            os.replace(path, old / path.name)
            os.replace(part, path)
            shutil.rmtree(old)
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
    """Remove what writers that were killed left below ``folder``: parts that nobody has touched for ten minutes."""
    now = time.time()
    for pattern in (PART, OLD):
        for part in folder.rglob(f"{pattern}*"):
            if now - part.lstat().st_mtime > LEFT_BEHIND_S:
                shutil.rmtree(part) if part.is_dir() else part.unlink(missing_ok=True)


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

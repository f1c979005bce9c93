"""Fingerprints of files and values: the same content gives the same text, so unchanged work is not done again."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import os
from pathlib import Path
from typing import Any

import numpy as np

WHOLE_BELOW_BYTES = 32 * 2**20
SAMPLE_BYTES = 128 * 2**10
SAMPLES = 64


def fingerprint_value(value: Any) -> str:
    """Fingerprint a frozen value: dataclasses, mappings, sequences, arrays, text, numbers, None."""
    digest = hashlib.blake2b(digest_size=16)
    _feed(digest, value)
    return digest.hexdigest()


def fingerprint_path(path: Path) -> str:
    """Fingerprint a file or a folder by its content.

    Files up to 32 MiB are read whole. Of a larger file, its length, its modification time and 64 blocks spread
    evenly over it are read: a stack of 150 GB costs 8 MiB of reading. A folder is the fingerprint of the names and
    lengths of all its files and of the content of at most 64 of them; of more, or of more than 32 MiB, also of their
    dates.
    """
    path = Path(path)
    digest = hashlib.blake2b(digest_size=16)
    if path.is_dir():
        _feed_folder(digest, path)
    else:
        _feed_file(digest, path)
    return digest.hexdigest()


def _feed_folder(digest: Any, path: Path) -> None:
    files = sorted(
        (Path(root) / name for root, _, names in os.walk(path) for name in names), key=lambda p: p.as_posix()
    )
    stats = [file.stat() for file in files]
    read_whole = len(files) <= SAMPLES and sum(s.st_size for s in stats) <= WHOLE_BELOW_BYTES
    for file, stat in zip(files, stats, strict=True):
        date = "" if read_whole else stat.st_mtime_ns  # where all content is read, dates say nothing more
        digest.update(f"{file.relative_to(path).as_posix()}\0{stat.st_size}\0{date}\n".encode())
    for file in files[:: max(1, len(files) // SAMPLES)]:
        _feed_file(digest, file)


def _feed_file(digest: Any, path: Path) -> None:
    stat = path.stat()
    size = stat.st_size
    digest.update(f"{size}\n".encode())
    with path.open("rb") as handle:
        if size <= WHOLE_BELOW_BYTES:
            while block := handle.read(2**20):
                digest.update(block)
            return
        digest.update(f"{stat.st_mtime_ns}\n".encode())
        for start in np.linspace(0, size - SAMPLE_BYTES, SAMPLES).astype(int):
            handle.seek(int(start))
            digest.update(handle.read(SAMPLE_BYTES))


def _feed(digest: Any, value: Any) -> None:
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        digest.update(type(value).__name__.encode())
        for field in dataclasses.fields(value):
            digest.update(field.name.encode())
            _feed(digest, getattr(value, field.name))
    elif isinstance(value, np.ndarray):
        digest.update(f"{value.dtype.str}{value.shape}".encode())
        digest.update(np.ascontiguousarray(value).tobytes())
    elif isinstance(value, dict):
        digest.update(b"{")
        for key in sorted(value, key=str):
            digest.update(str(key).encode() + b"\0")
            _feed(digest, value[key])
        digest.update(b"}")
    elif isinstance(value, list | tuple):
        digest.update(b"[")
        for item in value:
            _feed(digest, item)
        digest.update(b"]")
    elif isinstance(value, Path):
        digest.update(value.as_posix().encode() + b"\0")
    else:
        digest.update(json.dumps(value, default=str).encode() + b"\0")

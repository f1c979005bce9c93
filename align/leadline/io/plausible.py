"""Volume files that promise what they cannot hold: refused by their headers, before anything large is read."""

from __future__ import annotations

import os
import struct
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.io.images import Image

BELOW_BYTES = 2**30
PACKED_AT_MOST = 2000.0
"""Bytes of voxels for each byte on disk; deflate reaches 1032 on a file of one value, a brain with much empty space
about 10."""
PIECE_BELOW_BYTES, PIECE_AT_MOST = 2**28, 50.0
"""A chunk, tile or strip is unpacked whole, so what it may hold for each byte of the whole file is bounded more."""


def require_plausible(image: Image) -> None:
    """Raise LeadlineError when a small file promises a volume that would fill the memory."""
    finest = image.levels[0].data
    promised = np.dtype(finest.dtype).itemsize
    for n in finest.shape:
        promised *= int(n)
    if promised > BELOW_BYTES and promised > PACKED_AT_MOST * _bytes(image.path, promised / PACKED_AT_MOST):
        shape = " x ".join(map(str, finest.shape))
        raise LeadlineError(
            f"promises {promised / 1e9:.3g} GB of voxels ({shape}), which is more than its "
            f"{_bytes(image.path, promised) / 1e6:.3g} MB can hold",
            where=str(image.path),
            mend="Its header is damaged, or parts of it are missing: copy or export it again",
        )


def require_small_pieces(path: Path, piece: Sequence[int], dtype: np.dtype) -> None:
    """Raise LeadlineError when the voxels of a small file are packed in chunks, tiles or strips that would fill the
    memory; ``piece`` : the shape of one."""
    promised = np.dtype(dtype).itemsize
    for n in piece:
        promised *= int(n)
    if promised > PIECE_BELOW_BYTES and promised > PIECE_AT_MOST * _bytes(path, promised / PIECE_AT_MOST):
        raise LeadlineError(
            f"packs its voxels in pieces of {' x '.join(map(str, piece))} ({promised / 1e9:.3g} GB), which its "
            f"{_bytes(path, promised) / 1e6:.3g} MB cannot fill",
            where=str(path),
            mend="Its header is damaged; copy it again, or export it with smaller chunks or tiles",
        )


def _bytes(path: Path, enough: float) -> int:
    """Bytes of a file or folder, counted until there are ``enough``. A header's voxels may be in a file beside it."""
    if path.is_file() and path.suffix.lower() != ".nhdr":
        return path.stat().st_size
    total = 0
    for root, _, names in os.walk(path if path.is_dir() else path.parent):
        for name in names:
            total += (Path(root) / name).lstat().st_size
            if total >= enough:
                return total
    return total


def require_chain(path: Path) -> None:
    """Raise LeadlineError when the directories of a TIFF file point back to one another, which has no end."""
    with path.open("rb") as handle:
        head = handle.read(16)
        order = {b"II": "<", b"MM": ">"}.get(head[:2], "<")
        big = head[2:4] in (b"\x2b\0", b"\0\x2b")
        count, entry, link = ("Q", 20, "Q") if big else ("H", 12, "I")
        seen: set[int] = set()
        end = path.stat().st_size
        try:
            (at,) = struct.unpack_from(order + link, head, 8 if big else 4)
            while at:
                if at in seen:
                    raise LeadlineError(
                        "its planes point back to one another",
                        where=str(path),
                        mend="The file is damaged; copy or export it again",
                    )
                seen.add(at)
                handle.seek(at)
                (n,) = struct.unpack(order + count, handle.read(struct.calcsize(order + count)))
                if n * entry > end:
                    return
                handle.seek(n * entry, os.SEEK_CUR)
                (at,) = struct.unpack(order + link, handle.read(struct.calcsize(order + link)))
        except (struct.error, OSError, OverflowError):  # cut short: its reader will say so
            return

"""Freed memory handed back to the system."""

from __future__ import annotations

import ctypes
import sys


def give_back() -> None:
    """Let go of memory that was freed and that the C library keeps for later (glibc); does nothing elsewhere.

    Without it a process holds what its hungriest stage and each of its threads once needed, all of it together.
    """
    if sys.platform == "linux":
        trim = getattr(ctypes.CDLL(None), "malloc_trim", None)
        if trim is not None:
            trim(0)

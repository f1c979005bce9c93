"""Takes the time of writing out of HDF5 files, so that the same transform gives the same bytes.

The library that writes them cannot be told to leave it out. Each object header of version 2 may hold four times and
ends in a checksum over itself, which is made anew.

References
----------
HDF5 File Format Specification version 3.0, IV.A.1.b: data object header prefix of version 2.
Jenkins B (2006), lookup3.c: ``hashlittle``, public domain.
"""

from __future__ import annotations

SIGNATURE = b"OHDR"
_TIMES, _PHASES = 0x20, 0x10
_MASK = 0xFFFFFFFF


def undated(content: bytes) -> bytes:
    """The content of an HDF5 file with every time of its object headers set to 0; all else as it was."""
    out = bytearray(content)
    at = content.find(SIGNATURE)
    while at >= 0:
        end = _end(content, at)
        if end is not None and content[at + 5] & _TIMES:
            out[at + 6 : at + 22] = bytes(16)
            out[end : end + 4] = lookup3(bytes(out[at:end])).to_bytes(4, "little")
        at = content.find(SIGNATURE, at + 4)
    return bytes(out)


def _end(content: bytes, at: int) -> int | None:
    """Where the checksum of a header stands; None where the bytes only look like a header."""
    if len(content) < at + 6 or content[at + 4] != 2:
        return None
    flags = content[at + 5]
    width = 1 << (flags & 3)
    size_at = at + 6 + (16 if flags & _TIMES else 0) + (4 if flags & _PHASES else 0)
    end = size_at + width + int.from_bytes(content[size_at : size_at + width], "little")
    told = int.from_bytes(content[end : end + 4], "little")
    return end if end + 4 <= len(content) and lookup3(content[at:end]) == told else None


def lookup3(data: bytes) -> int:
    """The 32 bit hash that HDF5 takes for checksums of its metadata."""
    a = b = c = (0xDEADBEEF + len(data)) & _MASK
    if not data:
        return c
    last = (len(data) - 1) // 12 * 12
    for start in range(0, last + 12, 12):
        words = data[start : start + 12].ljust(12, b"\0")
        x, y, z = (int.from_bytes(words[k : k + 4], "little") for k in (0, 4, 8))
        a, b, c = (a + x) & _MASK, (b + y) & _MASK, (c + z) & _MASK
        if start < last:
            for turn in (4, 6, 8, 16, 19, 4):
                a = ((a - c) & _MASK) ^ _turned(c, turn)
                c = (c + b) & _MASK
                a, b, c = b, c, a
    for turn in (14, 11, 25, 16, 4, 14, 24):
        c = ((c ^ b) - _turned(b, turn)) & _MASK
        a, b, c = b, c, a
    return b


def _turned(word: int, by: int) -> int:
    return ((word << by) | (word >> (32 - by))) & _MASK

"""Spoils files, by a seed: at random, by what is known to trip readers, and inside the structure of JSON and TOML."""

from __future__ import annotations

import json
import re
from collections.abc import Callable

import numpy as np

LARGEST_BYTES = 2**20
NUMBERS = (
    b"0", b"-0", b"-1", b"1", b"2", b"3", b"255", b"65536", b"2147483648", b"4294967296", b"18446744073709551616",
    b"1e999", b"-1e999", b"1e308", b"1e-320", b"nan", b"-inf", b"inf", b"0x10", b"1_000", b"1.", b".5", b"1e3",
    b"1,5", b" 7 ", b"+7", "\u0663".encode(), b"9" * 400, b"9" * 5000, b"0.1.2", b"true", b"null", b"",
)  # fmt: skip
WORDS = (
    b"../../x", b"/etc/passwd", b"/dev/zero", b"a/../../b", b"=1+1", b"@x", b"<script>x</script>", b"\0",
    b"\xef\xbb\xbf",
    b"\xff\xfe", b"\xed\xa0\x80", b"\r", b"\r\n", b"\n\n", b'"', b"'", b'""', b",", b";", b"\t", b"\\", b"{", b"}",
    b"[", b"]", b"[[", b"#", b"\xe2\x80\xae", b"\xe2\x80\xa8", b"e\xcc\x81", b"[" * 3000, b'{"a":' * 3000, b'"' * 7,
    b"x" * 70000, b"A", b"root", b"time_s", b"unit_id", b"channel", b"shank", b"2000-01-01", b"00:00:00",
)  # fmt: skip
INTEGERS = (
    0,
    1,
    2,
    7,
    127,
    128,
    255,
    256,
    32767,
    65535,
    2**24,
    2**31 - 1,
    2**31,
    2**32 - 1,
    2**40,
    2**63 - 1,
    2**64 - 1,
)
VALUES: tuple[object, ...] = (
    None, True, 0, -1, 1, 3, 2**31, 2**53, 2**64, -(2**70), 1e308, float("inf"), float("nan"), 0.5, "", "x", "0",
    "1e999",
    "../../../etc/passwd", "/dev/zero", "\0", "\ud800", "<u2", "|O", "<M8[ns]", "u1", "pickle", "zlib", [], [[]], {},
    [0],
    [0, 0, 0], [1, 1, 1], [-1, 2, 3], [10**6] * 3, [2**40] * 3, [1e-320] * 3, ["x"] * 3, [None], {"a": 1},
    {"id": "pickle"}, {"id": "zlib", "level": 99}, {"name": "gzip", "configuration": {"level": 1}}, "um", "mm",
    "Infinity",
)  # fmt: skip


def mutate(data: bytes, others: list[bytes], rng: np.random.Generator) -> bytes:
    """A spoilt copy: one to four changes."""
    for _ in range(int(rng.integers(1, 5))):
        change = CHANGES[int(rng.integers(len(CHANGES)))]
        data = change(data, others, rng)[:LARGEST_BYTES]
    return data


def _at(data: bytes, rng: np.random.Generator) -> int:
    """A place; the head of a file, where its meaning stands, as often as all the rest."""
    reach = len(data) if rng.random() < 0.5 else min(len(data), 400)
    return int(rng.integers(0, reach + 1))


def _flip(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    out = bytearray(data)
    for _k in range(int(rng.integers(1, 9))):
        if out:
            out[min(_at(data, rng), len(out) - 1)] = int(rng.integers(256))
    return bytes(out)


def _cut(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    return data[: _at(data, rng)]


def _drop(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    at = _at(data, rng)
    return data[:at] + data[at + int(rng.integers(1, 64)) :]


def _repeat(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    at = _at(data, rng)
    piece = data[at : at + int(rng.integers(1, 200))]
    return data[:at] + piece * int(rng.integers(1, 5)) + data[at:]


def _word(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    at = _at(data, rng)
    return data[:at] + WORDS[int(rng.integers(len(WORDS)))] + data[at + int(rng.integers(0, 4)) :]


def _number(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    """Another number, or a word, where there was a number."""
    found = list(re.finditer(rb"-?\d+(?:\.\d+)?(?:[eE][+-]?\d+)?", data[:20000]))
    if not found:
        return data
    match = found[int(rng.integers(len(found)))]
    new = NUMBERS if rng.random() < 0.8 else WORDS
    return data[: match.start()] + new[int(rng.integers(len(new)))] + data[match.end() :]


def _integer(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    """Another integer in binary."""
    size = int(rng.choice([1, 2, 4, 8]))
    at = _at(data, rng) // size * size if rng.random() < 0.7 else _at(data, rng)
    value = INTEGERS[int(rng.integers(len(INTEGERS)))] % 2 ** (8 * size)
    return data[:at] + value.to_bytes(size, "little" if rng.random() < 0.8 else "big") + data[at + size :]


def _line(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    """A line gone, twice, or moved."""
    lines = data.split(b"\n")
    a, b = (int(rng.integers(len(lines))) for _k in range(2))
    if rng.random() < 0.4:
        del lines[a]
    else:
        lines.insert(b, lines[a])
    return b"\n".join(lines)


def _splice(data: bytes, others: list[bytes], rng: np.random.Generator) -> bytes:
    other = others[int(rng.integers(len(others)))]
    return data[: _at(data, rng)] + other[_at(other, rng) :]


def _inside(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    """Another value, a lost key or a longer list inside JSON."""
    try:
        content = json.loads(data)
        places = _places(content)
        if not places:
            return data
        parent, key = places[int(rng.integers(len(places)))]
        what = rng.random()
        if what < 0.7:
            parent[key] = VALUES[int(rng.integers(len(VALUES)))]
        elif what < 0.85:
            del parent[key]
        elif isinstance(parent, list):
            parent.append(parent[key])
        else:
            parent[str(VALUES[int(rng.integers(len(VALUES)))])] = parent[key]
        return json.dumps(content).encode()
    except (ValueError, RecursionError):
        return data


def _places(node: object) -> list[tuple[object, object]]:
    """Every (parent, key) inside JSON."""
    pairs = list(node.items()) if isinstance(node, dict) else list(enumerate(node)) if isinstance(node, list) else []
    found: list[tuple[object, object]] = [(node, key) for key, _ in pairs]
    for _, child in pairs:
        found += _places(child)
    return found


def _cell(data: bytes, _: list[bytes], rng: np.random.Generator) -> bytes:
    """Another cell in a table, or another value of a key."""
    found = list(re.finditer(rb"[^,;\t\n=\[\]{}:]+", data[:20000]))
    if not found:
        return data
    match = found[int(rng.integers(len(found)))]
    new = NUMBERS if rng.random() < 0.6 else WORDS
    return data[: match.start()] + new[int(rng.integers(len(new)))] + data[match.end() :]


CHANGES: tuple[Callable[[bytes, list[bytes], np.random.Generator], bytes], ...] = (
    _flip, _cut, _drop, _repeat, _word, _number, _number, _integer, _integer, _line, _splice, _inside, _inside, _cell,
)  # fmt: skip

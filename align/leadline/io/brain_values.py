"""Checks of single values of ``brain.toml``: each gives the value as it is used, or raises TypeError or ValueError."""

from __future__ import annotations

import re
from math import isfinite

from leadline.base.errors import LeadlineError

NAME = re.compile(r"[\w][\w .+-]{0,79}")


def as_text(value: object) -> str:
    """A text."""
    if not isinstance(value, str) or "\0" in value:
        raise TypeError
    return value


def as_name(value: object) -> str:
    """A name that can be part of a file's name."""
    text = as_text(value)
    if not NAME.fullmatch(text):
        raise LeadlineError(
            f"{text!r} cannot be a name",
            mend="It names files: use letters, digits, spaces, . _ + -, at most 80, a letter or digit first",
        )
    return text


def as_integer(value: object) -> int:
    """A whole number of either sign."""
    if isinstance(value, bool) or not isinstance(value, int):
        raise TypeError
    return value


def as_whole(value: object) -> int:
    """0, 1, 2 and on."""
    number = as_integer(value)
    if number < 0:
        raise ValueError
    return number


def as_count(value: object) -> int:
    """1, 2 and on."""
    number = as_whole(value)
    if number == 0:
        raise ValueError
    return number


def as_whole_list(value: object) -> tuple[int, ...]:
    """A list of 0, 1, 2 and on."""
    if not isinstance(value, list):
        raise TypeError
    return tuple(as_whole(item) for item in value)


def as_boolean(value: object) -> bool:
    """True or false."""
    if not isinstance(value, bool):
        raise TypeError
    return value


def as_number(value: object) -> float:
    """A finite number."""
    if isinstance(value, bool) or not isinstance(value, int | float) or not isfinite(value):
        raise TypeError
    return float(value)


def as_positive(value: object) -> float:
    """A number above 0."""
    number = as_number(value)
    if number <= 0:
        raise ValueError
    return number


def as_not_negative(value: object) -> float:
    """A number of at least 0."""
    number = as_number(value)
    if number < 0:
        raise ValueError
    return number


def as_triple(value: object) -> tuple[float, float, float]:
    """Three numbers."""
    if not isinstance(value, list):
        raise TypeError
    a, b, c = (as_number(item) for item in value)
    return a, b, c


def as_triple_positive(value: object) -> tuple[float, float, float]:
    """Three numbers above 0."""
    if not isinstance(value, list):
        raise TypeError
    a, b, c = (as_positive(item) for item in value)
    return a, b, c


def as_increasing_pair(value: object) -> tuple[float, float]:
    """Two numbers, the second greater."""
    if not isinstance(value, list):
        raise TypeError
    low, high = (as_number(item) for item in value)
    if low >= high:
        raise ValueError
    return low, high


def as_word_pairs(value: object) -> tuple[tuple[str, str], ...]:
    """Keys and texts of a table."""
    if not isinstance(value, dict):
        raise TypeError
    return tuple((str(key), as_text(word)) for key, word in value.items())


def as_toward(value: object) -> str:
    """One of the six letters of directions."""
    text = as_text(value).strip().upper()
    if text not in tuple("APSIRL"):
        raise ValueError
    return text


def as_dtype(value: object) -> str:
    """The kind of samples of a flat file."""
    if value not in ("int16", "float32"):
        raise ValueError
    return str(value)

"""One family of errors: what is wrong, where, and how to mend it."""

from __future__ import annotations

from difflib import get_close_matches
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterable


MALFORMED = (ValueError, RecursionError)
"""What readers of text raise on what is no such text: wrong bytes, wrong syntax, numbers of 5000 digits, endless
nesting."""


class LeadlineError(ValueError):
    """The user's input is wrong; the message says what, where and how to mend it.

    Parameters
    ----------
    what : the fault, with the offending value.
    where : the file, key, row or penetration at fault.
    mend : what the user can do about it.
    """

    def __init__(self, what: str, *, where: str = "", mend: str = "") -> None:
        self.what = what
        self.where = where
        self.mend = mend
        super().__init__(self.__str__())

    def __str__(self) -> str:
        head = f"{self.where}: {self.what}" if self.where else self.what
        return f"{head}. {self.mend}" if self.mend else head


class Faults(LeadlineError):
    """Several faults found in one look, each a whole message."""

    def __init__(self, faults: Iterable[LeadlineError]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(str(fault) for fault in self.faults))


def nearest(word: str, known: Iterable[str]) -> str:
    """Name the known word that is nearest to ``word``, as a sentence.

    Examples
    --------
    >>> nearest("orientaton", ["orientation", "voxel_um"])
    "Did you mean 'orientation'?"
    >>> nearest("zebra", ["b", "a"])
    "Known are 'a', 'b'"
    """
    known = sorted(known)
    close = get_close_matches(word, known, n=1)
    return f"Did you mean '{close[0]}'?" if close else "Known are " + ", ".join(f"'{k}'" for k in known)

"""Points that people trace or count: CSV tables of stack or atlas um."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.io.tables import numbers, read_csv
from leadline.model.frames import STACK_COLUMNS

if TYPE_CHECKING:
    from pathlib import Path

    import pandas as pd

    from leadline.base.arrays import FloatArray


def read_hand_points(path: Path) -> dict[int, FloatArray]:
    """Hand-traced points of a penetration: shank -> ``(n >= 2, 3)`` stack um, in the order of the file.

    Raises LeadlineError when a column is missing, a cell is no number, or a shank has fewer than two points.
    """
    table = read_csv(path, STACK_COLUMNS, what="hand-traced points")
    points = numbers(table, STACK_COLUMNS, path)
    shank = numbers(table, ["shank"], path)[:, 0].astype(int) if "shank" in table else np.zeros(len(table), int)
    found = {int(s): points[shank == s] for s in np.unique(shank)}
    for number, rows in found.items():
        if len(rows) < 2:
            raise LeadlineError(
                f"shank {number} has {len(rows)} point, a track needs at least two",
                where=str(path),
                mend="Trace more points along the shank",
            )
    if not found:
        raise LeadlineError("holds no points", where=str(path), mend="Trace at least two points along the shank")
    return found


def read_points(path: Path, columns: tuple[str, ...]) -> tuple[pd.DataFrame, FloatArray]:
    """A table with all the user's columns, and its points ``(n, 3)`` from ``columns``."""
    table = read_csv(path, columns, what="points")
    return table, numbers(table, columns, path)

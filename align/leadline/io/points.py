"""Points that people trace or count: CSV tables of stack or atlas um."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.io.tables import csv_rows, csv_text, numbers, read_csv
from leadline.model.frames import ATLAS_COLUMNS, STACK_COLUMNS
from leadline.model.track import HandTrack

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    import pandas as pd

    from leadline.base.arrays import FloatArray

TRACK_EDIT_COLUMNS = ("penetration", "shank", *STACK_COLUMNS, "order")
ENTRY = "entry"
PAIR_COLUMNS = (*STACK_COLUMNS, *ATLAS_COLUMNS)


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


def track_edits_text(edits: Mapping[tuple[str, int], HandTrack]) -> str:
    """The content of ``track_edits.csv``: tracks drawn by hand, by (penetration, shank). The first point of a track
    whose entry was set by hand bears the mark 'entry'."""
    rows = [
        (penetration, shank, *(float(c) for c in point), order, ENTRY if drawn.entry_set and not order else "")
        for (penetration, shank), drawn in edits.items()
        for order, point in enumerate(drawn.points_um)
    ]
    return csv_text((*TRACK_EDIT_COLUMNS, "mark"), rows)


def read_track_edits(path: Path) -> dict[tuple[str, int], HandTrack]:
    """Tracks drawn by hand, from entry to tip; none where there is no such file. The column ``mark`` may be missing.

    Raises LeadlineError when another column is missing, a cell is no number, or a track has fewer than two points.
    """
    if not path.is_file():
        return {}
    found: dict[tuple[str, int], list[tuple[int, list[float], str]]] = {}
    for number, row in enumerate(csv_rows(path, TRACK_EDIT_COLUMNS, what="hand-drawn tracks"), 2):
        try:
            point = [float(row[c]) for c in STACK_COLUMNS]
            key = (row["penetration"], int(row["shank"]))
            found.setdefault(key, []).append((int(row["order"]), point, row.get("mark") or ""))
        except (ValueError, TypeError) as error:
            raise LeadlineError(
                f"is no point of a track ({error})", where=f"{path}, line {number}", mend="Correct or remove that line"
            ) from error
    for (penetration, shank), rows in found.items():
        if len(rows) < 2 or not np.isfinite([point for _, point, _ in rows]).all():
            raise LeadlineError(
                f"the track of {penetration}, shank {shank} needs at least two finite points",
                where=str(path),
                mend="Add points or remove the track",
            )
    return {key: _drawn(sorted(rows)) for key, rows in found.items()}


def _drawn(rows: list[tuple[int, list[float], str]]) -> HandTrack:
    return HandTrack(np.array([point for _, point, _ in rows]), rows[0][2] == ENTRY)


def pairs_text(stack_um: FloatArray, atlas_um: FloatArray) -> str:
    """The content of ``registration_pairs.csv``: places named twice, ``(n, 3)`` in stack and in atlas um."""
    rows = [tuple(map(float, (*s, *a))) for s, a in zip(stack_um, atlas_um, strict=True)]
    return csv_text(PAIR_COLUMNS, rows)


def read_pairs(path: Path) -> tuple[FloatArray, FloatArray]:
    """Places named twice, ``(n, 3)`` in stack and in atlas um; none where there is no such file.

    Raises LeadlineError when a column is missing or a cell is no number.
    """
    if not path.is_file():
        return np.zeros((0, 3)), np.zeros((0, 3))
    table = csv_rows(path, PAIR_COLUMNS, what="registration pairs")
    try:
        values = np.array([[float(row[c]) for c in PAIR_COLUMNS] for row in table]).reshape(-1, 6)
    except (ValueError, TypeError) as error:
        raise LeadlineError(f"holds no pair of points ({error})", where=str(path), mend="Correct that line") from error
    return values[:, :3], values[:, 3:]

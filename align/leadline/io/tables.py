"""Tables that Leadline writes and reads back: CSV and Parquet, whole or not at all."""

from __future__ import annotations

import csv
import io
import json
from typing import TYPE_CHECKING, Any

from leadline.base.atomic import whole_file, write_text
from leadline.base.errors import LeadlineError, nearest
from leadline.model.anchor import ANCHOR_COLUMNS, Anchor, Suggestion

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence
    from pathlib import Path

    import pandas as pd

SPREADSHEET_STARTS = ("=", "+", "-", "@", "\t", "\r")


def write_table(table: pd.DataFrame, path: Path) -> None:
    """Write a table as CSV or Parquet, by the suffix of ``path``; a file that already says this is left alone."""
    if path.suffix == ".parquet":
        with whole_file(path) as part:
            table.to_parquet(part, index=False)
        return
    write_text(path, table_text(table))


def table_text(table: pd.DataFrame) -> str:
    """A table as CSV in which no name and no cell is run by a spreadsheet."""
    import pandas as pd

    words = [name for name in table.columns if not pd.api.types.is_numeric_dtype(table[name])]
    safe = table.assign(**{name: table[name].map(_harmless) for name in words}).rename(columns=_harmless)
    return str(safe.to_csv(index=False, lineterminator="\n"))


def read_csv(path: Path, needed: Sequence[str], *, what: str) -> pd.DataFrame:
    """Read a user's CSV table, every cell as it stands; ``needed`` columns must be there.

    Raises LeadlineError when the file cannot be read as CSV or a column is missing.
    """
    import pandas as pd

    try:
        table = pd.read_csv(path, skipinitialspace=True, encoding="utf-8-sig")
    except (pd.errors.ParserError, pd.errors.EmptyDataError, UnicodeDecodeError) as error:
        raise LeadlineError(
            f"cannot be read as a CSV table of {what} ({error})",
            where=str(path),
            mend=f"Its first line must name the columns {', '.join(needed)}",
        ) from error
    for column in needed:
        if column not in table.columns:
            raise LeadlineError(
                f"column '{column}' is missing",
                where=str(path),
                mend=f"{nearest(column, map(str, table.columns))}; {what} need {', '.join(needed)}",
            )
    return table


def numbers(table: pd.DataFrame, columns: Sequence[str], path: Path) -> Any:
    """The ``columns`` as a float64 array ``(n, k)``; raises LeadlineError naming the first row that is no number."""
    import numpy as np
    import pandas as pd

    try:
        values = table[list(columns)].apply(pd.to_numeric, errors="coerce").to_numpy(float)
    except OverflowError:  # integers beyond all floats
        values = table[list(columns)].map(lambda cell: pd.to_numeric(str(cell)[:40], errors="coerce")).to_numpy(float)
        values = np.where(np.abs(values) > 1e30, np.inf, values)
    bad = np.argwhere(~np.isfinite(values))
    if bad.size:
        row, column = bad[0]
        raise LeadlineError(
            f"line {row + 2}, column '{columns[column]}': {table[columns[column]].iloc[row]!r} is not a finite number",
            where=str(path),
            mend="Correct or remove that line",
        )
    return values


def anchors_text(anchors: Iterable[Anchor]) -> str:
    """The content of ``anchors.csv``."""
    return csv_text(ANCHOR_COLUMNS, ([getattr(a, c) for c in ANCHOR_COLUMNS] for a in anchors))


def suggestions_text(suggestions: Iterable[Suggestion]) -> str:
    """The content of ``suggestions.csv``."""
    rows = ([*(getattr(s.anchor, c) for c in ANCHOR_COLUMNS), s.support, s.against] for s in suggestions)
    return csv_text((*ANCHOR_COLUMNS, "support", "against"), rows)


def read_anchors(path: Path) -> tuple[Anchor, ...]:
    """Anchors of an ``anchors.csv`` (none where there is no such file).

    Raises LeadlineError naming the line at fault.
    """
    return tuple(anchor for anchor, _ in _anchor_rows(path))


def read_suggestions(path: Path) -> tuple[Suggestion, ...]:
    """Suggestions of a ``suggestions.csv`` (none where there is no such file)."""
    return tuple(Suggestion(a, row.get("support") or "", row.get("against") or "") for a, row in _anchor_rows(path))


def _anchor_rows(path: Path) -> list[tuple[Anchor, dict[str, str]]]:
    if not path.is_file():
        return []
    rows = csv_rows(path, ANCHOR_COLUMNS[:4], what="anchors")
    return [(_anchor(row, f"{path}, line {n}"), row) for n, row in enumerate(rows, 2)]


def csv_rows(path: Path, needed: Sequence[str], *, what: str) -> list[dict[str, str]]:
    """Rows of a CSV table that Leadline wrote and people may edit, every cell as text, formula guards taken off.

    Raises LeadlineError when the file is no CSV or a ``needed`` column is missing.
    """
    try:
        reader = csv.DictReader(io.StringIO(path.read_text(encoding="utf-8-sig")), strict=True)
        rows = list(reader)
    except (csv.Error, UnicodeDecodeError) as error:
        raise LeadlineError(f"cannot be read as CSV ({error})", where=str(path), mend="Mend or delete it") from error
    missing = [c for c in needed if rows and c not in (reader.fieldnames or ())]
    if missing:
        raise LeadlineError(
            f"column '{missing[0]}' is missing", where=str(path), mend=f"{what} need the columns {', '.join(needed)}"
        )
    return [{key: _unharmed(cell) for key, cell in row.items() if key is not None} for row in rows]


def _anchor(row: dict[str, str], where: str) -> Anchor:
    try:
        return Anchor(
            row["penetration"] or "",
            int(row["shank"]),
            float(row["tip_distance_um"]),
            float(row["track_depth_um"]),
            float(row.get("sd_um") or 40.0),
            row.get("landmark") or "",
            row.get("source") or "user",
            row.get("note") or "",
        )
    except LeadlineError as error:
        raise LeadlineError(error.what, where=where, mend=error.mend) from error
    except (ValueError, TypeError) as error:
        raise LeadlineError(
            f"is not an anchor ({error})", where=where, mend="shank is a whole number; distances, depths and sd are um"
        ) from error


def write_json(value: Mapping[str, Any], path: Path) -> None:
    """Write a JSON object, keys in the given order, two spaces, one final newline."""
    write_text(path, json.dumps(value, indent=2, ensure_ascii=False, allow_nan=False) + "\n")


def csv_text(columns: Sequence[str], rows: Iterable[Sequence[object]]) -> str:
    """A CSV table as text; numbers as they are, so that reading gives the same bits."""
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows([_harmless(cell) for cell in row] for row in rows)
    return buffer.getvalue()


def _harmless(cell: object) -> object:
    """A text that a spreadsheet would run as a formula gets an apostrophe before it; so does one that has its own."""
    return f"'{cell}" if isinstance(cell, str) and _is_formula(cell) else cell


def _is_formula(cell: str) -> bool:
    if len(cell) < 2 or not cell.lstrip("'").startswith(SPREADSHEET_STARTS):
        return False
    try:
        float(cell)
    except ValueError:
        return True
    return False


def _unharmed(cell: str | None) -> str:
    text = cell or ""
    return text[1:] if text[:1] == "'" and text.lstrip("'").startswith(SPREADSHEET_STARTS) else text

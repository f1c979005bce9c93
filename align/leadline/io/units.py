"""The user's own table of units: ``unit_id`` and any columns of theirs."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline.base.errors import LeadlineError
from leadline.io.tables import read_csv

if TYPE_CHECKING:
    from pathlib import Path

    import pandas as pd

KEYS = ("unit_id", "recording")


def read_unit_table(path: Path) -> pd.DataFrame:
    """Read a unit table: ``unit_id`` as text, ``recording`` (from 1) where there is one, other columns as they stand.

    Raises LeadlineError when ``unit_id`` is missing or empty somewhere, or a unit has two rows.
    """
    import pandas as pd

    table = read_csv(path, ("unit_id",), what="units")
    for key in KEYS:
        if key in table.columns:
            _require_filled(table[key], key, path)
    if "recording" in table.columns and not pd.api.types.is_integer_dtype(table["recording"]):
        raise LeadlineError(
            "column 'recording' holds something else than whole numbers",
            where=str(path),
            mend="Count the penetration's recordings from 1, in the order of brain.toml",
        )
    table["unit_id"] = unit_names(table["unit_id"])
    keys = [key for key in KEYS if key in table.columns]
    twice = table.duplicated(keys)
    if twice.any():
        row = int(twice.to_numpy().argmax())
        raise LeadlineError(
            f"line {row + 2}: unit '{table['unit_id'].iloc[row]}' has two rows",
            where=str(path),
            mend="Keep one row a unit; with several recordings a column 'recording' (from 1) tells units apart",
        )
    return table


def unit_names(ids: pd.Series) -> pd.Series:
    """Unit ids as text, written as spike tables' are: whole numbers without a decimal point."""
    import pandas as pd

    if pd.api.types.is_numeric_dtype(ids):
        whole = (ids % 1 == 0).all()
        return (ids.astype("int64") if whole else ids).astype(str)
    return ids.astype(str).str.strip()


def _require_filled(column: pd.Series, name: str, path: Path) -> None:
    empty = column.isna().to_numpy()
    if empty.any():
        raise LeadlineError(
            f"line {int(empty.argmax()) + 2}: '{name}' is empty", where=str(path), mend="Every row is a unit"
        )

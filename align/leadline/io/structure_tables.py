"""Structure tables: ``structures.csv`` of an atlas folder, and the tables of others that it is made from."""

from __future__ import annotations

import csv
import json
import os
import re
from typing import TYPE_CHECKING, Any

from leadline.base.errors import MALFORMED, Faults, LeadlineError
from leadline.model.atlas import TISSUES, Structure, Structures

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence
    from pathlib import Path

LARGEST_ID = 2**32 - 1
COLUMNS = ("id", "acronym", "name", "parent_id", "colour")
OPTIONAL_COLUMNS = ("layer", "coarse", "tissue")


def read_structures(path: Path) -> tuple[Structures, tuple[str, ...]]:
    """Read ``structures.csv``: the tree, and which optional columns the file has. Unknown columns are let be.

    Raises LeadlineError with all faults of the table at once.
    """
    if not os.path.isfile(path):
        raise LeadlineError("is not there", where=str(path), mend="Name the structure table in atlas.toml")
    try:
        with path.open(newline="", encoding="utf-8-sig") as handle:
            table = csv.DictReader(handle)
            header = [name.strip() for name in table.fieldnames or ()]
            table.fieldnames = header
            lines = list(table)
    except (UnicodeDecodeError, csv.Error) as error:
        raise LeadlineError(f"is no CSV table in UTF-8 ({error})", where=str(path), mend="Save it again") from error
    missing = [name for name in COLUMNS if name not in header]
    if missing:
        raise LeadlineError(f"lacks the column{'s' if len(missing) > 1 else ''} {', '.join(missing)}", where=str(path),
                            mend="The columns are " + ", ".join(COLUMNS))  # fmt: skip
    rows, faults = [], []
    for number, line in enumerate(lines, start=2):
        try:
            rows.append(_structure(line, f"{path}, line {number}"))
        except LeadlineError as fault:
            faults.append(fault)
    faults += _twice(rows, str(path))
    if faults:
        raise Faults(faults)
    if not rows:
        raise LeadlineError("has no rows", where=str(path), mend="Write one row for each structure")
    return Structures(tuple(rows)), tuple(name for name in OPTIONAL_COLUMNS if name in header)


def _structure(line: Mapping[str, str | None], where: str) -> Structure:
    cell = {key: (value or "").strip() for key, value in line.items() if isinstance(value, str | None)}
    tissue, coarse = cell.get("tissue") or "grey", (cell.get("coarse") or "false").lower()
    if tissue not in TISSUES:
        raise LeadlineError(f"tissue is {tissue!r}", where=where, mend="It is one of " + ", ".join(TISSUES))
    if coarse not in ("true", "false"):
        raise LeadlineError(f"coarse is {coarse!r}", where=where, mend="Write true or false")
    if not cell["acronym"]:
        raise LeadlineError("the acronym is empty", where=where, mend="Give every structure an acronym")
    return Structure(
        structure_id(cell["id"], "id", where),
        cell["acronym"],
        cell["name"] or cell["acronym"],
        structure_id(cell["parent_id"], "parent_id", where) if cell["parent_id"] else None,
        colour(cell["colour"], where),
        cell.get("layer", ""),
        coarse == "true",
        tissue,
    )


def structure_id(text: str, column: str, where: str) -> int:
    """A whole number from 1 to 2^32 - 1, exact."""
    if not re.fullmatch(r"\d{1,20}", text) or not 1 <= int(text) <= LARGEST_ID:
        empty = "; leave it empty at the root" if column == "parent_id" else ""
        raise LeadlineError(
            f"{column} is {text!r}", where=where, mend=f"Write a whole number from 1 to {LARGEST_ID}{empty}"
        )
    return int(text)


def colour(text: str, where: str) -> str:
    """'#rrggbb' from six hexadecimal digits with or without '#'; grey where empty."""
    if not text:
        return "#808080"
    if not re.fullmatch(r"#?[0-9a-fA-F]{6}", text):
        raise LeadlineError(f"colour is {text!r}", where=where, mend="Write six hexadecimal digits, e.g. '#3f8fd2'")
    return "#" + text.removeprefix("#").lower()


def _twice(rows: list[Structure], where: str) -> list[LeadlineError]:
    faults, ids, acronyms = [], set[int](), dict[str, int]()
    for row in rows:
        if row.id in ids:
            faults.append(LeadlineError(f"id {row.id} has two rows", where=where, mend="Give each structure one row"))
        elif row.acronym in acronyms:
            faults.append(
                LeadlineError(
                    f"acronym {row.acronym!r} names both id {acronyms[row.acronym]} and id {row.id}",
                    where=where,
                    mend="Give each structure an acronym of its own; results name regions by it",
                )
            )
        ids.add(row.id)
        acronyms.setdefault(row.acronym, row.id)
    return faults


def write_structures(path: Path, rows: Sequence[Structure]) -> None:
    """Write ``structures.csv``."""
    with path.open("w", newline="", encoding="utf-8") as handle:
        table = csv.writer(handle, lineterminator="\n")
        table.writerow((*COLUMNS, *OPTIONAL_COLUMNS))
        for row in rows:
            parent = "" if row.parent_id is None else row.parent_id
            coarse = "true" if row.coarse else "false"
            table.writerow((row.id, row.acronym, row.name, parent, row.colour, row.layer, coarse, row.tissue))


def read_foreign_table(path: Path) -> Any:
    """Read a structure table of any making: JSON as it is, CSV (',', ';' or tab) as a list of rows of text.

    Raises LeadlineError when it is missing or neither.
    """
    if not path.is_file():
        raise LeadlineError("the structure table is not there", where=str(path), mend="Correct the path")
    try:
        text = path.read_text("utf-8-sig")
        if path.suffix.lower() == ".json":
            return json.loads(text)
        head = text.partition("\n")[0]
        delimiter = max(",;\t", key=head.count)
        return list(csv.DictReader(text.splitlines(), delimiter=delimiter, skipinitialspace=True))
    except (*MALFORMED, csv.Error) as error:
        raise LeadlineError(
            f"is neither JSON nor a CSV table in UTF-8 ({error})", where=str(path), mend="Save it again"
        ) from error

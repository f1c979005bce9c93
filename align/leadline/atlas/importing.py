"""Structure tables of any making turned into the rows of ``structures.csv``."""

from __future__ import annotations

import colorsys
import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from leadline.base.errors import Faults, LeadlineError
from leadline.model.atlas import TISSUES, Structure

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

LARGEST_ID = 2**32 - 1
SYNONYMS: dict[str, tuple[str, ...]] = {
    "id": ("id", "structure_id", "label_id", "labelid", "index", "idx", "value", "label_value", "label", "#"),
    "acronym": ("acronym", "abbreviation", "abbrev", "abbr", "short_name", "shortname", "symbol"),
    "name": ("name", "full_name", "fullname", "label_name", "structure_name", "safe_name", "structure", "region",
             "description", "label"),
    "parent": ("parent_id", "parent_structure_id", "parent", "parent_acronym", "parent_abbreviation", "parent_name",
               "parentid"),
    "path": ("structure_id_path", "id_path", "path"),
    "layer": ("layer",),
    "coarse": ("coarse",),
    "tissue": ("tissue",),
}  # fmt: skip
COLOURS = ("colour", "color", "color_hex_triplet", "color_hex", "colour_hex", "hex", "hex_color", "rgb_hex", "rgb",
           "rgb_triplet")  # fmt: skip
_TRIPLETS = (("red", "green", "blue"), ("r", "g", "b"), ("color_r", "color_g", "color_b"))


@dataclass(frozen=True, slots=True)
class Imported:
    """Rows as the table has them. ``given`` : which of 'layer', 'coarse', 'tissue' it fills itself. ``notes`` : for the
    user."""

    rows: tuple[Structure, ...]
    given: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()


def structures_from(content: Any, *, where: str) -> Imported:
    """Rows of a table: a list of flat rows, or a tree of objects with ``children`` (bare, or the list under ``msg``).

    Columns are known by their usual names. Where a table has no acronyms the names serve; where it has no colours,
    structures get hues far apart. A row of id 0 is what lies outside the brain and is left out.

    Raises
    ------
    LeadlineError : ids or names are missing, an id is no whole number or has two rows, a parent is unknown.
    """
    records = list(_flat(content, None, where))
    if not records:
        raise LeadlineError("the structure table is empty", where=where, mend="Give one row for each structure")
    columns = _columns(records, where)
    if any("children" in record for record in records):
        columns["parent"] = "parent_id"
    rows, faults, notes = [], [], []
    parents: list[str] = []
    for number, record in enumerate(records, start=1):
        place = f"{where}, structure {number}"
        try:
            row = _row(record, columns, number, place)
        except LeadlineError as fault:
            faults.append(fault)
            continue
        if row is None:
            notes.append("the row of id 0 (outside the brain) is left out")
            continue
        rows.append(row)
        parents.append(_parent_text(record, columns))
    faults += _doubles(rows, where)
    if faults:
        raise Faults(faults)
    rows = _with_parents(rows, parents, where)
    if len(rows) > 1 and not any(row.parent_id for row in rows):
        notes.append("the table names no parents, so every structure stands alone")
    return Imported(tuple(rows), tuple(c for c in ("layer", "coarse", "tissue") if c in columns), tuple(notes))


def _flat(content: Any, parent: Any, where: str) -> Iterator[dict[str, Any]]:
    """Every object of a list or tree, its parent's id filled in where it stands inside its parent."""
    if isinstance(content, dict) and isinstance(content.get("msg"), list):
        content = content["msg"]
    if isinstance(content, dict) and "id" not in content:
        lists = [value for value in content.values() if isinstance(value, list)]
        content = lists[0] if len(lists) == 1 else None
    if isinstance(content, dict):
        content = [content]
    if not isinstance(content, list) or not all(isinstance(item, dict) for item in content):
        raise LeadlineError(
            "is no list of structures and no tree with 'children'", where=where, mend="Give CSV rows or nested JSON"
        )
    for item in content:
        record = {str(key).strip().lower().replace(" ", "_"): value for key, value in item.items() if key is not None}
        if "children" in record:
            record.setdefault("parent_id", parent)
            if record["parent_id"] is None:
                record["parent_id"] = parent
        elif parent is not None:
            record["parent_id"] = parent
        yield record
        yield from _flat(record.get("children") or [], record.get("id"), where) if record.get("children") else ()


def _columns(records: Sequence[Mapping[str, Any]], where: str) -> dict[str, str]:
    """Which column of the table holds what."""
    present = {key for record in records for key in record}
    columns: dict[str, str] = {}
    for meaning, words in SYNONYMS.items():
        found = next((word for word in words if word in present and word not in columns.values()), None)
        if found is not None:
            columns[meaning] = found
    if "name" not in columns and "acronym" in columns:
        columns["name"] = columns["acronym"]
    missing = [meaning for meaning in ("id", "name") if meaning not in columns]
    if missing:
        known = "; ".join(f"{meaning}: {', '.join(SYNONYMS[meaning][:5])}" for meaning in missing)
        raise LeadlineError(
            f"no column for {' and '.join(missing)} among {', '.join(sorted(present))}",
            where=where,
            mend=f"Name them as one of these ({known})",
        )
    return columns


def _row(record: Mapping[str, Any], columns: Mapping[str, str], number: int, where: str) -> Structure | None:
    identity = whole_number(record.get(columns["id"]), where)
    if identity == 0:
        return None
    name = _text(record, columns, "name")
    acronym = _text(record, columns, "acronym") or name
    if not acronym:
        raise LeadlineError(f"id {identity} has neither name nor acronym", where=where, mend="Write one")
    tissue = _text(record, columns, "tissue") or "grey"
    if tissue not in TISSUES:
        raise LeadlineError(f"tissue is {tissue!r}", where=where, mend="It is one of " + ", ".join(TISSUES))
    return Structure(
        identity,
        acronym,
        name or acronym,
        None,
        _colour(record, where) or hue(number),
        _text(record, columns, "layer"),
        _text(record, columns, "coarse").lower() in ("true", "1", "yes"),
        tissue,
    )


def _text(record: Mapping[str, Any], columns: Mapping[str, str], meaning: str) -> str:
    value = record.get(columns.get(meaning, ""))
    return "" if value is None else str(value).strip()


def whole_number(value: Any, where: str) -> int:
    """An id as an exact whole number; '12.0', as spreadsheets write it, counts.

    Raises LeadlineError for anything else, for negative numbers and above 2^32 - 1.
    """
    text = str(value).strip()
    match = re.fullmatch(r"(\d{1,20})(?:\.0*)?", text)
    if not match or not 0 <= int(match.group(1)) <= LARGEST_ID:
        raise LeadlineError(f"the id is {text!r}", where=where, mend=f"Ids are whole numbers from 1 to {LARGEST_ID}")
    return int(match.group(1))


def _colour(record: Mapping[str, Any], where: str) -> str:
    """'#rrggbb' from six hexadecimal digits, a list of three, 'r, g, b' or three columns; '' where there is none."""
    value = next((record[word] for word in COLOURS if record.get(word) not in (None, "")), None)
    if value is None:
        triplet = next((t for t in _TRIPLETS if all(record.get(c) not in (None, "") for c in t)), None)
        if triplet is None:
            return ""
        value = [record[c] for c in triplet]
    said = value
    if isinstance(value, str):
        # a hexadecimal triplet that a spreadsheet took for a number has lost its leading zeros
        text = value.strip().removeprefix("#").removeprefix("0x")
        if re.fullmatch(r"[0-9a-fA-F]{1,6}", text):
            return "#" + text.zfill(6).lower()
        value = re.findall(r"[\d.]+", value)
    try:
        parts = [float(part) for part in value]
    except (TypeError, ValueError):
        parts = []
    if len(parts) != 3 or not all(0 <= part <= 255 for part in parts):
        raise LeadlineError(
            f"the colour is {said!r}",
            where=where,
            mend="Write six hexadecimal digits or three numbers from 0 to 255",
        )
    if max(parts) <= 1.0 and any(part != int(part) for part in parts):
        parts = [part * 255 for part in parts]
    return "#" + "".join(f"{round(part):02x}" for part in parts)


def hue(number: int) -> str:
    """A colour for a structure that has none; neighbours in the table are far apart (golden ratio of the circle)."""
    rgb = colorsys.hsv_to_rgb(number * 0.6180339887 % 1.0, 0.45, 0.85)
    return "#" + "".join(f"{round(255 * part):02x}" for part in rgb)


def _parent_text(record: Mapping[str, Any], columns: Mapping[str, str]) -> str:
    text = _text(record, columns, "parent")
    if not text and "path" in columns:
        steps = [step for step in re.split(r"[/,>]", _text(record, columns, "path")) if step.strip()]
        text = steps[-2].strip() if len(steps) > 1 else ""
    return "" if text.lower() in ("", "0", "0.0", "-1", "-1.0", "none", "null", "nan", "root_parent") else text


def _doubles(rows: Sequence[Structure], where: str) -> list[LeadlineError]:
    seen: dict[int, str] = {}
    faults = []
    for row in rows:
        if row.id in seen:
            faults.append(
                LeadlineError(
                    f"id {row.id} has two rows ({seen[row.id]} and {row.acronym})",
                    where=where,
                    mend="Give each structure one row",
                )
            )
        seen[row.id] = row.acronym
    return faults


def _with_parents(rows: Sequence[Structure], parents: Sequence[str], where: str) -> list[Structure]:
    """Rows with their parents' ids; a parent may be named by id, acronym or name."""
    from dataclasses import replace

    ids = {str(row.id): row.id for row in rows}
    words = {row.name: row.id for row in rows} | {row.acronym: row.id for row in rows}
    found, faults = [], []
    for row, text in zip(rows, parents, strict=True):
        parent = ids.get(re.sub(r"\.0*$", "", text), words.get(text)) if text else None
        if text and parent is None:
            faults.append(
                LeadlineError(
                    f"the parent {text!r} of structure {row.id} ({row.acronym}) has no row",
                    where=where,
                    mend="Add its row or leave its parent empty",
                )
            )
        found.append(replace(row, parent_id=None if parent == row.id else parent))
    if faults:
        raise Faults(faults)
    return found

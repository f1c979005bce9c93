"""``leadline compare``: two readings of one brain, channel by channel, or a reading and a reference."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.model.frames import ATLAS_COLUMNS

if TYPE_CHECKING:
    from collections.abc import Iterable

    import pandas as pd

    from leadline.base.arrays import AnyArray

KEYS = ("penetration", "channel")
NAMED = ("region", "coarse_region", "layer")
NOT_LOCATED = "not located"
TABLE_SUFFIXES = (".csv", ".parquet")
SAME_PLACE_UM = 1.0


@dataclass(frozen=True, slots=True, eq=False)
class Reading:
    """A channel table and what to call it. ``atlas`` : its atlas folder, None where only the table is known."""

    name: str
    table: pd.DataFrame
    atlas: Path | None = None


@dataclass(frozen=True, slots=True)
class Agreement:
    """How far two namings agree over ``channels`` channels. ``kappa`` : None where chance alone would agree fully."""

    channels: int
    share: float
    kappa: float | None


@dataclass(frozen=True, slots=True)
class Difference:
    """Second less first, um. ``depth_*`` along the track, ``apart_*`` in space; None where columns lack."""

    depth_median_um: float | None
    depth_abs_median_um: float | None
    depth_abs_p95_um: float | None
    apart_median_um: float | None
    apart_p95_um: float | None


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """Two readings over their common channels. ``rows`` : one a channel, the readings' columns side by side."""

    first: str
    second: str
    rows: pd.DataFrame
    only_first: int
    only_second: int
    difference: Difference
    agreement: dict[str, Agreement]
    by_penetration: dict[str, tuple[Difference, dict[str, Agreement]]]


def read_reading(path: Path, progress: Progress = SILENT) -> Reading:
    """A brain (located first where that is due) or a channel table of its own.

    Raises LeadlineError when there is no such brain or table, or the table is none of channels.
    """
    if path.suffix.lower() in TABLE_SUFFIXES:
        return Reading(path.stem, _table(path))
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.finished import located

    brain = located(read_brain(path), progress)
    return Reading(brain.name, _table(brain.out / "channels.parquet"), brain.atlas)


def name_apart(readings: Iterable[tuple[Reading, Path]]) -> list[Reading]:
    """The readings under names that tell them apart: their own, else those of their folders or files."""
    pairs = list(readings)
    names = [reading.name for reading, _ in pairs]
    if len(set(names)) == len(names):
        return [reading for reading, _ in pairs]
    folders = [_folder_name(path) for _, path in pairs]
    if len(set(folders)) < len(folders):
        folders = [f"{name} ({number})" for number, name in enumerate(folders, 1)]
    return [Reading(folder, r.table, r.atlas) for folder, (r, _) in zip(folders, pairs, strict=True)]


def _folder_name(path: Path) -> str:
    path = path.absolute()
    return path.parent.name if path.name == "brain.toml" else path.name


def _table(path: Path) -> pd.DataFrame:
    import pandas as pd

    from leadline.io.tables import numbers, read_csv

    if not path.is_file():
        raise LeadlineError("there is no such table", where=str(path), mend="Name a brain or a channel table")
    if path.suffix == ".parquet":
        table = pd.read_parquet(path)
    else:
        table = read_csv(path, KEYS, what="channels")
    missing = [name for name in KEYS if name not in table.columns]
    if missing:
        raise LeadlineError(f"column '{missing[0]}' is missing", where=str(path), mend="It is no table of channels")
    table = table.assign(
        penetration=table["penetration"].astype(str),
        channel=numbers(table, ["channel"], path)[:, 0].astype(np.int64),
        **{c: table[c].fillna("").astype(str) for c in NAMED if c in table.columns},
    )
    twice = table.duplicated(list(KEYS))
    if twice.any():
        row = table.loc[twice].iloc[0]
        raise LeadlineError(
            f"channel {row['channel']} of penetration {row['penetration']} has two rows", where=str(path),
            mend="Keep one row a channel",
        )  # fmt: skip
    return table


def compare(first: Reading, second: Reading) -> Comparison:
    """Compare two readings over the channels that both have; those not located in either are left out.

    Raises LeadlineError when no channel is in both, or a channel is another contact in the second.
    """
    joined = first.table.merge(second.table, on=list(KEYS), suffixes=("_1", "_2"), how="inner", sort=False)
    if joined.empty:
        raise LeadlineError(
            f"{first.name} and {second.name} have no channel in common",
            where="leadline compare",
            mend="Channels are matched by penetration and channel",
        )
    _require_same_contacts(joined, first, second)
    rows = joined
    for side in ("region_1", "region_2"):
        if side in rows.columns:
            rows = rows[rows[side] != NOT_LOCATED]
    common = len(joined)
    parts = {str(name): part for name, part in rows.groupby("penetration", sort=False)}
    return Comparison(
        first.name,
        second.name,
        rows.reset_index(drop=True),
        len(first.table) - common,
        len(second.table) - common,
        _difference(rows),
        _agreements(rows),
        {name: (_difference(part), _agreements(part)) for name, part in parts.items()},
    )


def _require_same_contacts(joined: pd.DataFrame, first: Reading, second: Reading) -> None:
    if not {"tip_distance_um_1", "tip_distance_um_2"} <= set(joined.columns):
        return
    apart = (joined["tip_distance_um_1"] - joined["tip_distance_um_2"]).abs() > SAME_PLACE_UM
    if apart.any():
        row = joined[apart].iloc[0]
        raise LeadlineError(
            f"channel {row['channel']} of penetration {row['penetration']} is {row['tip_distance_um_1']:g} um from the "
            f"tip in {first.name} and {row['tip_distance_um_2']:g} um in {second.name}",
            where="leadline compare",
            mend="These are not readings of one recording, or tip_offset_um differs",
        )


def _difference(rows: pd.DataFrame) -> Difference:
    depth = _finite(_pair_difference(rows, "track_depth_um"))
    places = [_pair_difference(rows, name) for name in ATLAS_COLUMNS]
    apart = None
    if all(p is not None for p in places):
        apart = _finite(np.linalg.norm(np.array(places, float), axis=0))
    return Difference(
        _rounded(None if depth is None else np.median(depth)),
        _rounded(None if depth is None else np.median(np.abs(depth))),
        _rounded(None if depth is None else np.percentile(np.abs(depth), 95)),
        _rounded(None if apart is None else np.median(apart)),
        _rounded(None if apart is None else np.percentile(apart, 95)),
    )


def _pair_difference(rows: pd.DataFrame, column: str) -> AnyArray | None:
    if not {f"{column}_1", f"{column}_2"} <= set(rows.columns):
        return None
    return np.asarray(rows[f"{column}_2"].to_numpy(float) - rows[f"{column}_1"].to_numpy(float))


def _finite(values: AnyArray | None) -> AnyArray | None:
    if values is None or not np.isfinite(values).any():
        return None
    return np.asarray(values[np.isfinite(values)])


def _rounded(value: Any) -> float | None:
    return None if value is None else round(float(value), 2)


def _agreements(rows: pd.DataFrame) -> dict[str, Agreement]:
    found = {}
    for column in NAMED:
        if {f"{column}_1", f"{column}_2"} <= set(rows.columns):
            one, two = rows[f"{column}_1"].to_numpy(object), rows[f"{column}_2"].to_numpy(object)
            if column == "layer":  # where neither sees a layer there is nothing to agree on
                either = (one != "") | (two != "")
                one, two = one[either], two[either]
            if len(one):
                found[column] = Agreement(len(one), round(float((one == two).mean()), 4), cohens_kappa(one, two))
    return found


def cohens_kappa(one: AnyArray, two: AnyArray) -> float | None:
    """Agreement of two namings beyond chance: ``(po - pe) / (1 - pe)``.

    Returns None where both always give the same one name: chance alone would then agree fully.

    References
    ----------
    Cohen (1960), Educ. Psychol. Meas. 20, 37, equation 1. doi:10.1177/001316446002000104

    Examples
    --------
    >>> cohens_kappa(np.array(["a", "a", "b", "b"]), np.array(["a", "b", "b", "b"]))
    0.5
    """
    observed = float((one == two).mean())
    names, codes = np.unique(np.concatenate([one, two]).astype(str), return_inverse=True)
    share_one = np.bincount(codes[: len(one)], minlength=len(names)) / len(one)
    share_two = np.bincount(codes[len(one) :], minlength=len(names)) / len(two)
    chance = float(share_one @ share_two)
    return None if chance >= 1.0 else round((observed - chance) / (1.0 - chance), 4)


def comparison_json(found: Comparison) -> dict[str, Any]:
    """The figures for ``--json``."""
    import dataclasses

    def part(difference: Difference, agreement: dict[str, Agreement]) -> dict[str, Any]:
        named = {k: dataclasses.asdict(v) for k, v in agreement.items()}
        return {"difference": dataclasses.asdict(difference), "agreement": named}

    return {
        "first": found.first,
        "second": found.second,
        "channels": len(found.rows),
        "only_first": found.only_first,
        "only_second": found.only_second,
        **part(found.difference, found.agreement),
        "by_penetration": {name: part(*parts) for name, parts in found.by_penetration.items()},
    }


def comparison_rows(found: Comparison) -> pd.DataFrame:
    """A row a channel: both depths and their difference, the distance apart, and both names of region and layer."""
    import pandas as pd

    rows = found.rows
    table: dict[str, Any] = {name: rows[name] for name in KEYS}
    table["tip_distance_um"] = rows.get("tip_distance_um_1", rows.get("tip_distance_um"))
    depth = _pair_difference(rows, "track_depth_um")
    if depth is not None:
        table |= {"track_depth_um_first": rows["track_depth_um_1"], "track_depth_um_second": rows["track_depth_um_2"]}
        table["depth_difference_um"] = depth.round(2)
    places = [_pair_difference(rows, name) for name in ATLAS_COLUMNS]
    if all(p is not None for p in places):
        table["apart_um"] = np.linalg.norm(np.array(places, float), axis=0).round(2)
    for column in NAMED:
        if {f"{column}_1", f"{column}_2"} <= set(rows.columns):
            table |= {f"{column}_first": rows[f"{column}_1"], f"{column}_second": rows[f"{column}_2"]}
            table[f"same_{column}"] = rows[f"{column}_1"] == rows[f"{column}_2"]
    return pd.DataFrame({name: column for name, column in table.items() if column is not None})

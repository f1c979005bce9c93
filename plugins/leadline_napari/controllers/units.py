"""Units as points in stack um, coloured by any of their columns."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.model.channels import STEREO_COLUMNS
from leadline.pipeline.laminar import COLUMNS as LAMINAR_COLUMNS
from leadline.pipeline.units import UNIT_COLUMNS
from leadline_napari.controllers.canvas import NAMES, axis_names, contact_colours
from leadline_napari.states import LayerSpec, Legend
from leadline_napari.style import CATEGORIES, NO_VALUE, lookup, rgb_of

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd

    from leadline.base.arrays import AnyArray
    from leadline.model.atlas import Structures
    from leadline.model.track import Track

UNIT_SIZE_UM = 110.0
RANGE = (2.0, 98.0)
REGION = "region"
NO_MEASURE = ("brain", "penetration", "unit_id", "region_id", "region_name", "contact_id", "shank", "in_brain")


def choices(units: pd.DataFrame) -> tuple[str, ...]:
    """Columns that units can be coloured by: the user's own first, then region, layer and measures."""
    own = [c for c in units.columns if c not in (*UNIT_COLUMNS, *STEREO_COLUMNS, *LAMINAR_COLUMNS)]
    names = dict.fromkeys([*own, REGION, *units.columns])
    return tuple(c for c in names if c not in NO_MEASURE and units[c].notna().any())


def unit_spec(
    units: pd.DataFrame, column: str, tracks: Mapping[tuple[str, int], Track], structures: Structures, code: str
) -> tuple[LayerSpec, Legend]:
    """Every located unit on its track, with its whole row, coloured by ``column``; and what the colours mean."""
    table = units[units["track_depth_um"].notna()].reset_index(drop=True)
    points = np.zeros((len(table), 3))
    for (penetration, shank), track in tracks.items():
        rows = np.flatnonzero((table["penetration"] == penetration) & (table["shank"] == shank))
        points[rows] = track.stack_at(table["track_depth_um"].to_numpy(float)[rows])
    colours, legend = coloured(table, column, structures)
    options: dict[str, object] = {
        "features": table, "size": UNIT_SIZE_UM, "face_color": colours, "border_color": colours, "border_width": 0.0,
        "symbol": "disc", "opacity": 1.0, "blending": "translucent_no_depth", "projection_mode": "all",
        "axis_labels": axis_names(code),
    }  # fmt: skip
    return LayerSpec(NAMES["units"], "points", points, options), legend


def coloured(table: pd.DataFrame, column: str, structures: Structures) -> tuple[AnyArray, Legend]:
    """RGBA ``(n, 4)`` from 0 to 1: the atlas's colours for regions, a range of lightness for numbers, else classes."""
    values = table[column]
    if column == REGION:
        first = table.drop_duplicates("region")
        hexes = [structures[int(i)].colour if i else NO_VALUE for i in first["region_id"].fillna(0)]
        entries = tuple(zip(first["region"].astype(str), hexes, strict=True))
        return contact_colours(table["region_id"].fillna(0).to_numpy(), structures), Legend(column, entries)
    if values.dtype.kind in "iuf":
        return _by_size(values.to_numpy(float), column)
    names = sorted(values.dropna().astype(str).unique())
    of = {name: CATEGORIES[k % len(CATEGORIES)] for k, name in enumerate(names)}
    hexes = [of.get(str(v), NO_VALUE) if v == v and v is not None else NO_VALUE for v in values]
    return _rgba([rgb_of(h) for h in hexes]), Legend(column, tuple(of.items()))


def _by_size(values: AnyArray, column: str) -> tuple[AnyArray, Legend]:
    there = np.isfinite(values)
    low, high = np.percentile(values[there], RANGE) if there.any() else (0.0, 1.0)
    table = lookup("sequential")
    share = np.clip((np.nan_to_num(values) - low) / (high - low or 1.0), 0, 1)
    rgb = np.where(there[:, None], table[(share * 255).astype(int)], np.array(rgb_of(NO_VALUE)))
    ends = tuple("#{:02x}{:02x}{:02x}".format(*table[k].tolist()) for k in (0, 255))
    entries = tuple(zip((f"{low:.3g}", f"{high:.3g}"), ends, strict=True))
    return _rgba(rgb), Legend(column, entries, is_range=True)


def _rgba(rgb: object) -> AnyArray:
    rgb = np.asarray(rgb, float).reshape(-1, 3) / 255
    return np.column_stack([rgb, np.ones(len(rgb))])

"""The channel table as rows of plain values."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline_napari.states import TableState
from leadline_napari.style import rgb_of

if TYPE_CHECKING:
    import pandas as pd

    from leadline.model.atlas import Structures
    from leadline_napari.session import Selection

FIRST = (
    "penetration", "shank", "channel", "region", "layer", "p_region", "track_depth_um", "track_depth_sd_um",
    "tip_distance_um", "boundary_um", "basis", "region_name", "coarse_region", "tissue", "in_brain",
)  # fmt: skip

_KEPT: dict[int, tuple[pd.DataFrame, TableState]] = {}


def table_of(channels: pd.DataFrame, structures: Structures, selection: Selection) -> TableState:
    """Rows with what people look for first, the rest after it; missing values are None."""
    kept = _KEPT.get(id(channels))
    if kept is None or kept[0] is not channels:
        _KEPT.clear()
        kept = _KEPT[id(channels)] = (channels, _rows(channels, structures))
    state = kept[1]
    chosen = None if selection.channel is None else (selection.penetration, selection.channel)
    return TableState(state.columns, state.rows, state.colours, chosen)


def _rows(channels: pd.DataFrame, structures: Structures) -> TableState:
    first = [c for c in FIRST if c in channels.columns]
    columns = [*first, *(c for c in channels.columns if c not in first and c != "brain")]
    table = channels[columns].astype(object)
    table = table.where(table.notna(), None)
    rows = tuple(tuple(_plain(v) for v in row) for row in table.itertuples(index=False, name=None))
    region = channels["region_id"]
    colours = tuple((74, 74, 74) if r is None or r != r or not int(r) else rgb_of(structures[int(r)].colour)
                    for r in region.astype(object).where(region.notna(), None))  # fmt: skip
    return TableState(tuple(columns), rows, colours)


def _plain(value: object) -> object:
    return value.item() if hasattr(value, "item") else value

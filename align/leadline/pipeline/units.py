"""``leadline units``: every unit where its spikes place it, with the user's own columns carried along."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError, nearest
from leadline.base.fingerprint import fingerprint_value
from leadline.base.progress import SILENT, Progress
from leadline.model.channels import CHANNEL_COLUMNS, STEREO_COLUMNS
from leadline.model.posterior import DepthPosterior
from leadline.model.probe import NOT_RECORDED, Probe
from leadline.pipeline import products
from leadline.pipeline.bench import Bench
from leadline.pipeline.finished import located
from leadline.pipeline.laminar import COLUMNS as LAMINAR_COLUMNS
from leadline.pipeline.laminar import with_cortical_depth

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    import pandas as pd

    from leadline.base.arrays import FloatArray, IntArray
    from leadline.model.brain import Brain, Penetration
    from leadline.model.recording import Spikes

OWN_COLUMNS = ("brain", "penetration", "recording", "unit_id", "shank", "channel", "n_spikes", "tip_distance_um")
PLACE_COLUMNS = CHANNEL_COLUMNS[CHANNEL_COLUMNS.index("track_depth_um") :]
UNIT_COLUMNS = (*OWN_COLUMNS, *PLACE_COLUMNS)


@dataclass(frozen=True, slots=True, eq=False)
class Places:
    """Units of one recording, all arrays ``(n,)``: index into the spikes' unit names, spikes, depth and shank."""

    unit: IntArray
    n_spikes: IntArray
    tip_distance_um: FloatArray
    shank: IntArray


def unit_places(spikes: Spikes) -> Places:
    """Where each unit sat: the shank of most of its spikes, and the median tip distance of those.

    Units without spikes are left out.
    """
    units = np.unique(spikes.unit_id)
    count, tip, shank = [], [], []
    order = np.argsort(spikes.unit_id, kind="stable")
    edges = np.searchsorted(spikes.unit_id[order], [*units, np.iinfo(np.int64).max])
    for start, stop in pairwise(edges):
        mine = order[start:stop]
        shanks, times = np.unique(spikes.shank[mine], return_counts=True)
        home = shanks[times.argmax()]
        count.append(len(mine))
        shank.append(home)
        tip.append(np.median(spikes.tip_distance_um[mine][spikes.shank[mine] == home]))
    return Places(units, np.array(count, np.int64), np.array(tip, float), np.array(shank, np.int64))


def posterior_at(posterior: DepthPosterior, tip_distance_um: FloatArray) -> DepthPosterior:
    """The same draws at other tip distances (n,), ascending: linear between rows, slope 1 beyond them."""
    rows = posterior.tip_distance_um
    inside = np.clip(tip_distance_um, rows[0], rows[-1])
    depth = np.stack([np.interp(inside, rows, draw) for draw in posterior.depth_um]) - (tip_distance_um - inside)
    label = posterior.label_id
    if label is not None:
        label = label[:, np.abs(rows[None, :] - tip_distance_um[:, None]).argmin(axis=1)]
    return replace(posterior, tip_distance_um=tip_distance_um, depth_um=depth, label_id=label)


def unit_table(brain: Brain, bench: Bench | None = None) -> pd.DataFrame:
    """A row for every unit of every recording, in the order of ``brain.toml``; the brain must be located.

    Columns are :data:`UNIT_COLUMNS`, then the bregma-based ones where the atlas has them, ``cortical_depth`` and
    ``layer_source`` where it has cortex, then the user's own.
    A column of the user's that bears one of these names comes out as ``NAME_user``.

    Raises LeadlineError when no recording has spikes, or a unit table is wrong.
    """
    import pandas as pd

    shelf = _Shelf(bench or Bench(brain))
    parts = [
        _carried(shelf.recording(penetration, number, spikes), penetration)
        for penetration in brain.penetrations
        for number, spikes in shelf.spikes(penetration)
    ]
    if not parts:
        raise LeadlineError(
            "no recording names a table of spikes",
            where=str(brain.file),
            mend='Add spikes = "FILE" (time_s, unit_id and tip_distance_um or channel) to a recording',
        )
    table = pd.concat(parts, ignore_index=True)
    stereo = [name for name in STEREO_COLUMNS if name in table.columns]
    own = [name for name in table.columns if name not in UNIT_COLUMNS and name not in stereo]
    placed = with_cortical_depth(table[[*UNIT_COLUMNS, *stereo]], shelf.bench)
    return pd.concat([placed, table[own]], axis=1)


class _Shelf:
    """What locating units needs, read once."""

    def __init__(self, bench: Bench) -> None:
        from leadline.io.tables import read_anchors

        self.bench, brain = bench, bench.brain
        self.error_um = products.RegistrationFiles(brain).read().error_um
        self.tracks = {(t.penetration, t.shank): t for t in products.read_tracks(brain)[0]}
        self.posteriors = {(p.penetration, p.shank): p for p in products.read_posteriors(brain)}
        self.anchors = read_anchors(brain.out / "anchors.csv")
        self.probes: dict[str, Probe] = {}

    def spikes(self, penetration: Penetration) -> list[tuple[int, Spikes]]:
        """Number (from 1) and spikes of every recording that has some."""
        if not any(source.spikes for source in penetration.recordings):
            return []
        self.probes[penetration.name] = self.bench.probe(penetration)
        recordings = self.bench.recordings(penetration, self.probes[penetration.name])
        return [(number, r.spikes) for number, r in enumerate(recordings, 1) if r.spikes is not None]

    def recording(self, penetration: Penetration, number: int, spikes: Spikes) -> pd.DataFrame:
        """Rows of one recording, from the tip upward, shank by shank."""
        import pandas as pd

        places, probe = unit_places(spikes), self.probes[penetration.name]
        parts = []
        for shank in np.unique(places.shank):
            mine = np.flatnonzero(places.shank == shank)
            mine = mine[np.lexsort((places.unit[mine], places.tip_distance_um[mine]))]
            units = _as_contacts(places, mine, spikes, probe, int(shank))
            rows = self._rows(penetration.name, int(shank), units)
            rows = rows.rename(columns={"contact_id": "unit_id"}).drop(columns=["x_um", "y_um"])
            parts.append(
                rows.assign(
                    recording=number,
                    n_spikes=places.n_spikes[mine],
                    channel=_nearest_channel(probe, int(shank), places.tip_distance_um[mine]),
                )
            )
        return pd.concat(parts, ignore_index=True)

    def _rows(self, name: str, shank: int, units: Probe) -> pd.DataFrame:
        from leadline.locating.assign import locate
        from leadline.locating.table import channel_rows, unlocated_rows

        brain, atlas = self.bench.brain, self.bench.atlas
        posterior = self.posteriors.get((name, shank))
        if posterior is None:
            return unlocated_rows(brain.name, name, units, atlas)
        tip = units.tip_distance_um
        found = locate(
            tip,
            self.tracks[name, shank],
            posterior_at(posterior, np.unique(tip)),
            atlas,
            [a for a in self.anchors if (a.penetration, a.shank) == (name, shank)],
            registration_error_um=self.error_um,
            seed=brain.settings.locate.seed,
        )
        return channel_rows(brain.name, name, units, atlas, found)


def _as_contacts(places: Places, rows: IntArray, spikes: Spikes, probe: Probe, shank: int) -> Probe:
    """Units as sites on a shank, so that they are located by the very code that locates contacts."""
    n = len(rows)
    return Probe(
        tuple(spikes.unit_names[int(u)] for u in places.unit[rows]),
        np.zeros(n),
        places.tip_distance_um[rows] - probe.tip_offset_um,
        np.full(n, shank),
        np.full(n, NOT_RECORDED),
        probe.tip_offset_um,
    )


def _nearest_channel(probe: Probe, shank: int, tip_distance_um: FloatArray) -> IntArray:
    """Trace of the contact nearest in depth; of two in one row, the one that the probe file names first."""
    here = np.flatnonzero(probe.shank == shank)
    if not here.size:
        return np.full(len(tip_distance_um), NOT_RECORDED)
    gap = np.abs(probe.tip_distance_um[here][None, :] - tip_distance_um[:, None])
    return np.asarray(probe.channel[here[gap.argmin(axis=1)]], np.int64)


def _carried(rows: pd.DataFrame, penetration: Penetration) -> pd.DataFrame:
    """The rows with the user's columns; a unit that their table does not name has empty cells there."""
    if penetration.unit_table is None:
        return rows
    from leadline.io.units import KEYS, read_unit_table

    own = read_unit_table(penetration.unit_table)
    taken = {*UNIT_COLUMNS, *STEREO_COLUMNS, *LAMINAR_COLUMNS} - set(KEYS)
    own = own.rename(columns={name: f"{name}_user" for name in own.columns if name in taken})
    keys = [key for key in KEYS if key in own.columns]
    if not set(own["unit_id"]) & set(rows["unit_id"]):
        raise LeadlineError(
            f"none of its units ({_some(own)}) is among the spikes' ({_some(rows)})",
            where=str(penetration.unit_table),
            mend="unit_id must be written as in the spikes table",
        )
    return rows.merge(own, on=keys, how="left", sort=False, validate="many_to_one")


def _some(table: Any) -> str:
    return ", ".join(table["unit_id"].astype(str).head(3)) + (", ..." if len(table) > 3 else "")


def write_units(brain: Brain, progress: Progress = SILENT) -> pd.DataFrame:
    """Locate the units of a brain, running first what is missing or out of date; write ``out/units.csv`` and
    ``.parquet`` and return the table."""
    from leadline.io.tables import write_table

    table = unit_table(located(brain, progress))
    write_table(table, brain.out / "units.csv")
    write_table(table, brain.out / "units.parquet")
    return table


def pool(brains: Sequence[Brain], tables: Sequence[pd.DataFrame]) -> pd.DataFrame:
    """The units of several brains in one table.

    Raises LeadlineError when two brains bear one name or lie in different atlases.
    """
    import pandas as pd

    for i, brain in enumerate(brains):
        if brain.name in (earlier.name for earlier in brains[:i]):
            raise LeadlineError(f"two brains are named '{brain.name}'", where=str(brain.file), mend="Rename one")
    by_folder = {brain.atlas.resolve(): brain for brain in brains}
    marks = {_content(folder): brain for folder, brain in by_folder.items()} if len(by_folder) > 1 else {}
    if len(marks) > 1:
        first, other = list(marks.values())[:2]
        raise LeadlineError(
            f"{first.name} lies in {first.atlas}, {other.name} in {other.atlas}, which differ",
            where="atlas",
            mend="Pool brains that were located in one and the same atlas",
        )
    return pd.concat(tables, ignore_index=True)


def _content(atlas: Path) -> str:
    """Fingerprint of what an atlas says, wherever its files lie and however they were packed."""
    from leadline.pipeline.atlas_import import load_atlas

    read = load_atlas(atlas)
    return fingerprint_value([read.name, read.labels.array(), read.voxel_um, read.structures])


def require_value(table: pd.DataFrame, column: str, period: float | None = None) -> None:
    """Raises LeadlineError, naming the nearest column, unless located units have values in ``column`` to draw."""
    import pandas as pd

    names = [str(name) for name in table.columns]
    if column not in names:
        mend = f"{nearest(column, names)}; your own columns come from unit_table"
        raise LeadlineError(f"units have no column '{column}'", where="--value", mend=mend)
    if not (table[column].notna() & table["ap_um"].notna()).any():
        raise LeadlineError(f"no located unit has a '{column}'", where="--value", mend="Fill it in the unit table")
    if period is not None and not (period > 0 and pd.api.types.is_numeric_dtype(table[column])):
        raise LeadlineError(
            f"{period:g} is no period of '{column}'",
            where="--period",
            mend="It is for numbers, such as 180 for degrees",
        )

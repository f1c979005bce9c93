"""``leadline export``: located channels in the formats in which people keep their data."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.model.probe import Probe

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence
    from pathlib import Path

    import pandas as pd

    from leadline.base.arrays import AnyArray, IntArray
    from leadline.io.export_nwb import Change, Column
    from leadline.io.nwb_electrodes import Electrodes
    from leadline.model.atlas import Atlas
    from leadline.model.brain import Brain

NOT_LOCATED = "not located"


@dataclass(frozen=True, slots=True)
class NwbSummary:
    """What an export to NWB did, or would do. ``matches`` : a sentence for every penetration."""

    output: Path
    matches: tuple[str, ...]
    changes: tuple[Change, ...]
    written: bool


def located_channels(brain: Brain) -> pd.DataFrame:
    """The channel table of a located brain.

    Raises LeadlineError when no channel of it is located.
    """
    import pandas as pd

    table = pd.read_parquet(brain.out / "channels.parquet")
    if not (table["region"] != NOT_LOCATED).any():
        raise LeadlineError("no channel is located", where=str(brain.out / "channels.csv"), mend="See the warnings")
    return table


def export_nwb(
    brain: Brain,
    source: Path,
    output: Path | None,
    *,
    groups: Mapping[str, Sequence[str]],
    in_place: bool = False,
    dry_run: bool = False,
) -> NwbSummary:
    """Write location, coordinates, layer, probability, depth sd and basis of every electrode into a copy of ``source``.

    ``groups`` : electrode groups of a penetration that are not named as it is. With ``in_place`` the source itself is
    changed. ``dry_run`` writes nothing.

    Raises LeadlineError when electrodes cannot be matched or the file cannot be written safely.
    """
    from leadline.io.export_nwb import changes, electrodes_of, write_copy, write_in_place
    from leadline.pipeline.atlas_import import load_atlas

    if in_place == (output is not None):
        raise LeadlineError(
            "say either --output OUT.nwb or --in-place", where="--output", mend="A copy is the safer of the two"
        )
    table = located_channels(brain)
    electrodes = electrodes_of(source)
    rows, channels, matches = _matched(table, electrodes, groups, source)
    columns = _nwb_columns(channels, load_atlas(brain.atlas))
    target = source if output is None else output
    found = tuple(changes(source, rows, columns))
    if not dry_run:
        write_in_place(source, rows, columns) if output is None else write_copy(source, output, rows, columns)
    return NwbSummary(target, matches, found, not dry_run)


def _matched(
    table: pd.DataFrame, electrodes: Electrodes, groups: Mapping[str, Sequence[str]], source: Path
) -> tuple[IntArray, pd.DataFrame, tuple[str, ...]]:
    """Rows of the electrode table, the channels that they are, and a sentence for every penetration."""
    import pandas as pd

    from leadline.io.nwb_electrodes import groups_of, match

    names = [str(n) for n in table["penetration"].unique()]
    strangers = sorted(set(groups) - set(names))
    if strangers:
        known = ", ".join(names)
        raise LeadlineError(f"there is no penetration '{strangers[0]}'", where="--group", mend=f"There are {known}")
    parts, rows, told = [], [], []
    for name in names:
        mine = table[(table["penetration"] == name) & (table["region"] != NOT_LOCATED)]
        chosen = groups.get(name, ())
        wanted = tuple(chosen) or ((name,) if len(names) > 1 else groups_of(name, electrodes))
        if len(names) > 1 and not chosen and name not in electrodes.groups:
            told.append(f"{name}: the file has no group '{name}', nothing written for it")
            continue
        if mine.empty:
            told.append(f"{name}: not located, nothing written for it")
            continue
        found = match(_sites(mine), electrodes, wanted, where=str(source))
        here = found.row >= 0
        parts.append(mine[here])
        rows.append(found.row[here])
        told.append(
            f"{name}: {here.sum()} of {len(mine)} channels are electrodes of group {', '.join(found.groups)}, "
            f"matched by {found.by}"
        )
    if not parts:
        raise LeadlineError(
            f"no penetration has a group in the file; groups are {', '.join(electrodes.groups)}",
            where=str(source),
            mend="Say --group PENETRATION=GROUP",
        )
    row: IntArray = np.concatenate(rows)
    if len(np.unique(row)) < len(row):
        raise LeadlineError(
            "two penetrations claim the same electrodes", where="--group", mend="Give each its own group"
        )
    return row, pd.concat(parts, ignore_index=True), tuple(told)


def _sites(channels: pd.DataFrame) -> Probe:
    return Probe(
        tuple(channels["contact_id"].astype(str)),
        channels["x_um"].to_numpy(float),
        channels["y_um"].to_numpy(float),
        channels["shank"].to_numpy(np.int64),
        channels["channel"].to_numpy(np.int64),
    )


def _nwb_columns(channels: pd.DataFrame, atlas: Atlas) -> dict[str, Column]:
    """NWB's axis directions (x posterior, y inferior, z right) are those of the atlas frame."""
    from leadline import __version__
    from leadline.io.export_nwb import Column

    frame = (
        f"in the atlas '{atlas.name}', from the centre of the first voxel of its volume laid out as PIR; "
        f"estimated with Leadline {__version__}"
    )
    words: dict[str, tuple[str, str]] = {
        "location": ("region", f"structure of the atlas '{atlas.name}' (acronym) in which the electrode sat"),
        "layer": ("layer", f"cortical or hippocampal layer by the atlas '{atlas.name}' or empty where there is none"),
        "basis": (
            "basis",
            "what placed the electrode along its track: histology, physiology, between or beyond anchors",
        ),
    }
    numbers: dict[str, tuple[str, str]] = {
        "x": ("ap_um", f"um, growing posterior, {frame}"),
        "y": ("dv_um", f"um, growing inferior, {frame}"),
        "z": ("ml_um", f"um, growing right, {frame}"),
        "p_region": ("p_region", "probability, given all modelled error, that 'location' is right"),
        "track_depth_sd_um": ("track_depth_sd_um", "standard deviation of the electrode's place along its track, um"),
    }
    found = {}
    for name in ("location", "x", "y", "z", "layer", "p_region", "track_depth_sd_um", "basis"):
        source, description = (words | numbers)[name]
        values: AnyArray = (
            np.array([str(v) for v in channels[source]], dtype=object)
            if name in words
            else channels[source].to_numpy(float)
        )
        found[name] = Column(description, values)
    return found


def export_probeinterface(brain: Brain, folder: Path, *, dry_run: bool = False) -> list[Path]:
    """A copy of each penetration's probe file with where its contacts sat as contact annotations; returns the files."""
    from leadline.io.export_probeinterface import annotated, write_probe_file
    from leadline.pipeline.atlas_import import load_atlas

    table, atlas = located_channels(brain), load_atlas(brain.atlas)
    written = []
    for penetration in brain.penetrations:
        path = folder / f"{penetration.name}.json"
        mine = table[(table["penetration"] == penetration.name) & (table["region"] != NOT_LOCATED)]
        content = annotated(penetration.probe, penetration.probe_index, mine, _provenance(brain, atlas))
        if not dry_run:
            write_probe_file(content, path)
        written.append(path)
    return written


def export_bids(brain: Brain, folder: Path, *, dry_run: bool = False) -> list[Path]:
    """BIDS tables of electrodes, probes and the coordinate system; returns the files."""
    from leadline.base.atomic import write_text
    from leadline.io.export_bids import bids_files
    from leadline.pipeline.atlas_import import load_atlas

    atlas = load_atlas(brain.atlas)
    channels = located_channels(brain)
    channels = channels.assign(region=channels["region"].where(channels["region"] != NOT_LOCATED, ""))
    files = bids_files(brain.name, channels, atlas, _provenance(brain, atlas))
    for name, text in files.items():
        if not dry_run:
            write_text(folder / name, text)
    return [folder / name for name in files]


def _provenance(brain: Brain, atlas: Atlas) -> dict[str, str]:
    from leadline import __version__
    from leadline.pipeline.provenance import CAUTION

    return {
        "brain": brain.name,
        "atlas": atlas.name,
        "method": f"Leadline {__version__}",
        "frame": "um from the centre of the atlas' first voxel, laid out as PIR: ap posterior, dv inferior, ml right",
        "caution": CAUTION,
    }


def summary_json(summary: NwbSummary) -> dict[str, Any]:
    """The summary for ``--json``."""
    return {
        "output": str(summary.output),
        "written": summary.written,
        "matches": list(summary.matches),
        "changes": [
            {"column": c.column, "new": c.is_new, "electrodes": c.changed, "example": c.example}
            for c in summary.changes
        ],
    }

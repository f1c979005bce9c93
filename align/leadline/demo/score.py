"""How close a run came to the truth of an invented brain: reads ``out/`` and ``truth/``, and is read by no stage."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.demo.calibration import calibration_error, coverage
from leadline.model.frames import ATLAS_COLUMNS, STACK_COLUMNS
from leadline.model.track import along, arc_length

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    import pandas as pd

    from leadline.base.arrays import FloatArray

ON_TRACK_UM = 100.0
_KEYS = ["penetration", "shank"]
_WORDS = ("penetration", "layer", "mark", "region", "coarse_region")


@dataclass(frozen=True, slots=True)
class TrackScore:
    """Tracks against the truth, stack um.

    ``found`` : shanks whose track lies where it should; ``swapped`` lie on another shank's; ``false`` on none.
    Distances are of the found tracks to the true centre line; ``entry_um`` median distance of the entries; ``end_um``
    median error of the dye ends along the track, ``end_bias_um`` its median with sign (too deep is positive).
    """

    true: int
    found: int
    swapped: int
    false: int
    median_um: float
    p95_um: float
    entry_um: float
    end_um: float
    end_bias_um: float


@dataclass(frozen=True, slots=True)
class ChannelScore:
    """Channels that truly are in the brain, against the truth. Depth errors are along the true track, atlas um.

    ``number`` of them; ``placed`` : how many have a place at all (a penetration without a track has none; its channels
    count as wrong, not as deep).

    ``histology_um`` : (median, 95th percentile) of perfect histology: the true dye end and 1 probe um = 1 track um.
    ``region, coarse, layer`` : shares right; ``layer`` where the truth has one. ``calibration`` : expected calibration
    error of ``p_region``. ``covered`` : share of depth errors within 1.645 ``track_depth_sd_um``.
    ``in_brain`` : share of all channels rightly said to be inside or outside.
    """

    number: int
    placed: int
    median_um: float
    p95_um: float
    histology_um: tuple[float, float]
    region: float
    coarse: float
    layer: float
    in_brain: float
    calibration: float
    coarse_calibration: float
    covered: float


@dataclass(frozen=True, slots=True)
class Score:
    """``registration_um`` : (median, 95th percentile) over random points of present tissue; ``voxel_um`` of the atlas.

    ``penetrations`` : the channel score of each by name.
    """

    registration_um: tuple[float, float]
    voxel_um: float
    tracks: TrackScore
    channels: ChannelScore
    penetrations: dict[str, ChannelScore]


def score(folder: Path, to_atlas: Callable[[FloatArray], FloatArray] | None = None) -> Score:
    """Compare ``folder/out`` with ``folder/truth``.

    ``to_atlas`` : carries stack um ``(n, 3)`` to atlas um; by default what ``out/registration`` holds.

    Raises LeadlineError when the folder holds no truth or the brain has not been run.
    """
    truth, out = folder / "truth", folder / "out"
    if not (truth / "channels.csv").is_file():
        raise LeadlineError("holds no truth", where=str(folder), mend="Only an invented brain can be scored")
    if not (out / "channels.csv").is_file():
        raise LeadlineError("has not been run", where=str(folder), mend="Run `leadline run` on it first")
    points = _read(truth / "points.csv")
    carry = to_atlas or _carrier(folder)
    off = np.linalg.norm(carry(points[[*STACK_COLUMNS]].to_numpy()) - points[[*ATLAS_COLUMNS]].to_numpy(), axis=1)
    tracks = _read(truth / "tracks.csv")
    table = matched(folder)
    return Score(
        _middle_and_tail(off),
        _voxel_um(truth),
        score_tracks(tracks, _read(out / "tracks.csv")),
        score_channels(table),
        {str(name): score_channels(part) for name, part in table.groupby("penetration")},
    )


def _read(path: Path) -> pd.DataFrame:
    import pandas as pd

    # Layer "1" is no number and an empty layer no gap; an empty number is a channel without a place.
    table = pd.read_csv(path, dtype=dict.fromkeys(_WORDS, str), keep_default_na=False, na_values=[""])
    return table.fillna(dict.fromkeys([name for name in _WORDS if name in table.columns], ""))


def _carrier(folder: Path) -> Callable[[FloatArray], FloatArray]:
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.products import RegistrationFiles

    return RegistrationFiles(read_brain(folder)).read().stack_to_atlas


def _voxel_um(truth: Path) -> float:
    import json

    return float(json.loads((truth / "recipe.json").read_text("utf-8"))["atlas_voxel_um"])


def _middle_and_tail(values: FloatArray) -> tuple[float, float]:
    size = np.abs(np.asarray(values, float))
    size = size[np.isfinite(size)]
    return (float(np.median(size)), float(np.percentile(size, 95))) if size.size else (float("nan"), float("nan"))


def to_line(points_um: FloatArray, line_um: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Nearest places on a polyline that goes straight on beyond its ends.

    ``points_um`` : (n, 3). ``line_um`` : (m >= 2, 3). Returns arc lengths ``(n,)``, 0 at the first point of the line
    and negative before it, and distances ``(n,)``.
    """
    arc = arc_length(line_um)
    far = along(arc, line_um, np.array([-3000.0, arc[-1] + 3000.0]))
    whole = np.vstack([far[:1], line_um, far[1:]])
    length = np.concatenate([[-3000.0], arc, [arc[-1] + 3000.0]])
    start, step = whole[:-1], np.diff(whole, axis=0)
    off = np.asarray(points_um, float)[:, None] - start
    share = np.clip((off * step).sum(axis=2) / (step**2).sum(axis=1), 0, 1)
    distance = np.linalg.norm(off - share[..., None] * step, axis=2)
    best = distance.argmin(axis=1)
    rows = np.arange(len(best))
    return length[best] + share[rows, best] * np.diff(length)[best], distance[rows, best]


def score_tracks(truth: pd.DataFrame, found: pd.DataFrame) -> TrackScore:
    """Compare ``out/tracks.csv`` with ``truth/tracks.csv``."""
    lines = {_key(key): part for key, part in truth.groupby(_KEYS)}
    distances, entries, ends = [], [], []
    swapped = false = 0
    for key, track in found.groupby(_KEYS):
        points = track.sort_values("order")[[*STACK_COLUMNS]].to_numpy()
        fine = along(arc_length(points), points, np.arange(0.0, arc_length(points)[-1], 10.0))
        lies = [name for name, line in lines.items() if np.median(_to_true(fine, line)[1]) < ON_TRACK_UM]
        if _key(key) not in lies:
            swapped, false = swapped + bool(lies), false + (not lies)
            continue
        line = lines[_key(key)]
        place, _ = _to_true(points[-1:], line)
        dye_end, _ = _to_true(line.loc[line["mark"] == "dye_end", [*STACK_COLUMNS]].to_numpy(), line)
        distances.append(_to_true(fine, line)[1])
        entries.append(float(np.linalg.norm(points[0] - line[[*STACK_COLUMNS]].to_numpy()[0])))
        ends.append(float(place[0] - dye_end[0]))
    middle, tail = _middle_and_tail(np.concatenate(distances) if distances else np.zeros(0))
    end = np.asarray(ends)
    return TrackScore(
        len(lines),
        len(distances),
        swapped,
        false,
        middle,
        tail,
        _middle_and_tail(np.asarray(entries))[0],
        _middle_and_tail(end)[0],
        float(np.median(end)) if end.size else float("nan"),
    )


def _key(key: Any) -> tuple[str, int]:
    return str(key[0]), int(key[1])


def _to_true(points_um: FloatArray, line: pd.DataFrame) -> tuple[FloatArray, FloatArray]:
    return to_line(points_um, line.sort_values("order")[[*STACK_COLUMNS]].to_numpy())


def matched(folder: Path) -> pd.DataFrame:
    """Rows of ``out/channels.csv`` beside their truth: true columns end in ``_true``.

    Added: ``depth_error_um`` of the channel's place, projected on the true track, and ``histology_error_um`` of perfect
    histology at 1:1.
    """
    found, true = _read(folder / "out/channels.csv"), _read(folder / "truth/channels.csv")
    tracks = _read(folder / "truth/tracks.csv")
    table = found.merge(true, on=[*_KEYS, "channel"], suffixes=("", "_true"), validate="one_to_one")
    for name in ("in_brain", "in_brain_true"):
        table[name] = table[name].astype(str).str.lower() == "true"
    table["depth_error_um"] = np.nan
    table["histology_error_um"] = np.nan
    for key, line in tracks.groupby(_KEYS):
        rows = table.index[(table["penetration"] == key[0]) & (table["shank"] == key[1])]
        placed = table.loc[rows, [*ATLAS_COLUMNS]].to_numpy(float)
        place, _ = to_line(placed, line.sort_values("order")[[*ATLAS_COLUMNS]].to_numpy())
        place = np.where(np.isfinite(placed).all(axis=1), place, np.nan)
        end = float(line.loc[line["mark"] == "dye_end", "track_depth_um"].iloc[0])
        depth = table.loc[rows, "track_depth_um_true"]
        table.loc[rows, "depth_error_um"] = place - depth
        table.loc[rows, "histology_error_um"] = end - table.loc[rows, "tip_distance_um_true"] - depth
    return table


def score_channels(table: pd.DataFrame) -> ChannelScore:
    """Score rows of :func:`matched`."""
    inside = table[table["in_brain_true"]]
    placed = inside["depth_error_um"].notna()
    right = inside["region_id"] == inside["region_id_true"]
    coarse = inside["coarse_region"] == inside["coarse_region_true"]
    layered = inside[inside["layer_true"] != ""]
    middle, tail = _middle_and_tail(inside["depth_error_um"].to_numpy())
    return ChannelScore(
        len(inside),
        int(placed.sum()),
        middle,
        tail,
        _middle_and_tail(inside["histology_error_um"].to_numpy()),
        float(right.mean()),
        float(coarse.mean()),
        float((layered["layer"] == layered["layer_true"]).mean()),
        float((table["in_brain"] == table["in_brain_true"]).mean()),
        calibration_error(inside["p_region"][placed].to_numpy(), right[placed].to_numpy()),
        calibration_error(inside["p_coarse"][placed].to_numpy(), coarse[placed].to_numpy()),
        coverage(inside["depth_error_um"][placed].to_numpy(), inside["track_depth_sd_um"][placed].to_numpy()),
    )


def as_text(result: Score) -> str:
    """The score as a table for a terminal."""
    r, t, c = result.registration_um, result.tracks, result.channels
    worse = f"perfect histology at 1:1 has {c.histology_um[0]:.0f} and {c.histology_um[1]:.0f}"
    rows = [
        ("registration error", f"{r[0]:.0f} um median, {r[1]:.0f} at 95 %", f"atlas voxel {result.voxel_um:.0f} um"),
        ("tracks", f"{t.found} of {t.true} found", f"{t.swapped} swapped, {t.false} false"),
        ("centre line", f"{t.median_um:.1f} um median, {t.p95_um:.1f} at 95 %", "in the stack"),
        ("entry; dye end", f"{t.entry_um:.0f}; {t.end_um:.0f} um median", f"dye end bias {t.end_bias_um:+.0f} um"),
        ("depth of channels", f"{c.median_um:.0f} um median, {c.p95_um:.0f} at 95 %", worse),
        ("region right", f"{c.region:.1%}", f"of {c.number} channels in the brain, {c.placed} placed"),
        ("coarse region right", f"{c.coarse:.1%}", ""),
        ("layer right", f"{c.layer:.1%}", "where the truth has a layer"),
        ("inside or outside right", f"{c.in_brain:.1%}", "of all channels"),
        ("calibration error", f"{c.calibration:.3f} region, {c.coarse_calibration:.3f} coarse", "0 is honest"),
        ("within 1.645 sd", f"{c.covered:.1%}", "90 % is honest"),
    ]
    for name, part in result.penetrations.items():
        said = f"depth {part.median_um:.0f} um (histology {part.histology_um[0]:.0f})"
        rows.append((f"penetration {name}", said, f"region {part.region:.1%}, layer {part.layer:.1%}"))
    wide = [max(len(row[k]) for row in rows) for k in range(2)]
    return "\n".join(f"{a:<{wide[0]}}  {b:<{wide[1]}}  {note}".rstrip() for a, b, note in rows)

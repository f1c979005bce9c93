"""The profile of a penetration: every recording read once, then merged."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.progress import SILENT, Progress
from leadline.model.profile import FEATURES, Profile
from leadline.model.spectra import Spectra
from leadline.physiology.reading import ABSENT, FREQUENCY_HZ, Reading, read
from leadline.physiology.rows import Rows, rows_of

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from leadline.base.arrays import AnyArray, FloatArray
    from leadline.model.probe import Probe
    from leadline.model.recording import Recording
    from leadline.model.settings import ProfileSettings

SHARED_ROWS = 8  # rows that two recordings must share before their levels are compared


def profile_of(
    name: str,
    probe: Probe,
    recordings: Sequence[Recording],
    *,
    settings: ProfileSettings,
    progress: Progress = SILENT,
) -> tuple[Profile, Spectra]:
    """Turn the recordings of a penetration into features by depth.

    Every recording is read once, in blocks of bounded size; a row is one tip distance on one shank. Powers are means
    over the good contacts of a row, current source densities run down columns of contacts, and what a recording cannot
    say (a band above its rate, a response to events that are not there) is NaN.

    Parameters
    ----------
    name : of the penetration.
    probe : wired to the recordings' traces; contacts that were not recorded are left out.
    recordings : one or several, through the contacts of ``probe`` or through contacts of their own, which ``probe``
        holds too.
    settings : bands, mains, share to read, window around events.
    progress : told how far reading has come; may cancel it.

    Returns
    -------
    The profile, and the maps behind it for pictures.

    Raises
    ------
    LeadlineError where the probe is wired to traces that a recording does not have, or samples are not finite.
    """
    wired = probe.recorded
    rows = rows_of(wired)
    readings = [_read(recording, wired, rows, settings, progress) for recording in recordings]
    warnings = tuple(
        f"{recording.name or f'recording {number}'}: {text}" if len(recordings) > 1 else text
        for number, (recording, reading) in enumerate(zip(recordings, readings, strict=True), 1)
        for text in reading.warnings
    )
    profile = Profile(
        name,
        rows.shank,
        rows.tip_distance_um,
        merged_features(readings),
        _flags(readings, len(rows)),
        warnings + _strangers(recordings, readings),
        tuple((round(r.read_s, 3), round(r.of_s, 3)) for r in readings),
    )
    return profile, _spectra(name, rows, readings)


def _read(recording: Recording, wired: Probe, rows: Rows, settings: ProfileSettings, progress: Progress) -> Reading:
    """Read a recording through its own contacts, where it has some, and put what it says into the rows of all."""
    if recording.probe is None:
        return read(recording, wired, rows, settings, progress)
    own = recording.probe.recorded
    return read(recording, own, rows_of(own), settings, progress).placed(rows)


def _strangers(recordings: Sequence[Recording], readings: Sequence[Reading]) -> tuple[str, ...]:
    """Says which recordings share too few rows with the others to be brought to one level."""
    told = [(k, r) for k, r in enumerate(readings, 1) if r.field_s > 0]
    if len(told) < 2:
        return ()
    there = np.array([r.flags != ABSENT for _, r in told])
    lonely = [
        recordings[k - 1].name or f"recording {k}"
        for (k, _), mine, others in zip(told, there, there.sum(axis=0) - there, strict=True)
        if (mine & (others > 0)).sum() < SHARED_ROWS
    ]
    if not lonely:
        return ()
    return (
        f"{', '.join(lonely)}: fewer than {SHARED_ROWS} rows in common with the other recordings, so that levels "
        "cannot be compared; a step where one ends may be no border",
    )


def merged_features(readings: Sequence[Reading]) -> dict[str, FloatArray]:
    """Features of several recordings as one: means weighted by the time read, levels and phases made comparable.

    Where recordings share at least eight rows, their decibels and phases are first shifted to agree there in the
    median, so that a sleepier recording of other sites makes no step in the profile.
    """
    features = {}
    for feature in FEATURES:
        found = [
            (r.features[feature.name], r.field_s if feature.group == "lfp" else r.unit_s)
            for r in readings
            if feature.name in r.features
        ]
        if not found:
            continue
        values = np.stack([v for v, _ in found])
        weights = np.array([w for _, w in found])
        if feature.circular:
            features[feature.name] = _circular_mean(values, weights)
        else:
            if feature.name.endswith("_db"):
                values = _levelled(values)
            features[feature.name] = _mean(values, weights)
    return features


def _mean(values: FloatArray, weights: FloatArray) -> FloatArray:
    """Weighted mean over the first axis of what is finite; NaN where nothing is."""
    weight = np.where(np.isfinite(values), weights.reshape((-1,) + (1,) * (values.ndim - 1)), 0.0)
    total = weight.sum(axis=0)
    mean = (np.nan_to_num(values) * weight).sum(axis=0) / np.where(total > 0, total, 1.0)
    return np.where(total > 0, mean, np.nan)


def _levelled(values: FloatArray) -> FloatArray:
    """Recordings ``(K, R)`` shifted to one level by the rows that each shares with those before it."""
    levelled = values.copy()
    for k, held in _joined(values):
        shared = _finite(_mean(levelled[held], np.ones(len(held))) - values[k])
        if shared.size >= SHARED_ROWS:
            levelled[k] += float(np.median(shared))
    return levelled


def _joined(values: FloatArray) -> Iterator[tuple[int, list[int]]]:
    """The recordings ``(K, R)`` after the first, each next the one that shares most rows with those before it."""
    known = np.isfinite(values)
    held, left = [0], list(range(1, len(values)))
    while left:
        covered = known[held].any(axis=0)
        best = max(left, key=lambda k: (int((known[k] & covered).sum()), -k))
        yield best, held
        held.append(best)
        left.remove(best)


def _circular_mean(values: FloatArray, weights: FloatArray) -> FloatArray:
    """As :func:`_mean` for angles, each recording first turned to agree with those before it.

    A recording that shares too few rows with them counts from a clock of its own and is left out.
    """
    known = np.isfinite(values)
    turned = np.where(known, np.exp(1j * np.nan_to_num(values)), 0.0)
    for k, held in _joined(values):
        with_others = (turned[held] * weights[held][:, None]).sum(axis=0) * np.conj(turned[k])
        shared = with_others[(known[held].any(axis=0)) & known[k]]
        turn = np.exp(1j * np.angle(shared)).mean() if shared.size >= SHARED_ROWS else 0.0
        turned[k] *= turn / max(abs(turn), 1e-12)
    total = (turned * weights[:, None]).sum(axis=0)
    return np.where(np.abs(total) > 0, np.angle(total), np.nan)


def _finite(values: FloatArray) -> FloatArray:
    return values[np.isfinite(values)]


def _flags(readings: Sequence[Reading], n_rows: int) -> tuple[str, ...]:
    """The flag of each row; a row that one recording finds sound is sound."""
    told = [r.flags for r in readings if r.field_s > 0]
    if not told:
        return ("",) * n_rows
    flags = np.stack(told)
    sound = (flags == "").any(axis=0)
    first = np.take_along_axis(flags, (flags != ABSENT).argmax(axis=0)[None], axis=0)[0]
    return tuple(str(f) for f in np.where(sound | (first == ABSENT), "", first))


def _spectra(name: str, rows: Rows, readings: Sequence[Reading]) -> Spectra:
    power: AnyArray = np.full((len(rows), FREQUENCY_HZ.size), np.nan, np.float32)
    told = [r for r in readings if r.field_s > 0]
    if told:
        power = _mean(np.stack([r.power_uv2_per_hz for r in told]), np.array([r.field_s for r in told]))
    clearest = max((r for r in readings if r.evoked is not None), key=_clarity, default=None)
    shape: AnyArray = np.zeros((len(rows), 0))
    if clearest is None or clearest.evoked is None:
        return Spectra(name, rows.shank, rows.tip_distance_um, FREQUENCY_HZ, power, np.zeros(0), shape, shape)
    found = clearest.evoked
    return Spectra(
        name,
        rows.shank,
        rows.tip_distance_um,
        FREQUENCY_HZ,
        power,
        found.time_s,
        found.map_uv.astype(np.float32),
        found.map_csd.astype(np.float32),
        clearest.event_kind,
    )


def _clarity(reading: Reading) -> float:
    return reading.evoked.clarity if reading.evoked is not None else 0.0

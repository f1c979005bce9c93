"""The invented recordings say what the tissue says, and the truth of channels is the truth of the track."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
import pytest
from scipy.signal import welch

from leadline.demo.lfp import make_timeline, row_sources
from leadline.demo.recipe import Recipe, rough
from leadline.demo.recording import TRUTH_COLUMNS, UV_PER_BIT, channel_rows, write_recording
from leadline.demo.tissue import make_tissue
from leadline.demo.tracks import make_penetrations
from leadline.demo.units import make_units

if TYPE_CHECKING:
    from pathlib import Path

RECIPE = Recipe(seed=2, seconds=28.0)


@pytest.fixture(scope="module")
def recorded(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict, pd.DataFrame]:
    folder = tmp_path_factory.mktemp("rec")
    pen = make_penetrations(RECIPE)[0]
    table = write_recording(folder, RECIPE, pen)
    return folder, table, pd.DataFrame(list(channel_rows(RECIPE, pen)), columns=TRUTH_COLUMNS)


def _samples(folder: Path, table: dict) -> np.ndarray:
    return np.fromfile(folder / table["lfp"], "<i2").reshape(-1, table["n_channels"]) * UV_PER_BIT


def _band_db(samples: np.ndarray, low: float, high: float) -> np.ndarray:
    hz, power = welch(samples, 2500.0, nperseg=2500, axis=0)
    return 10 * np.log10(power[(hz >= low) & (hz < high)].mean(axis=0) + 1e-12)


def test_file_is_as_long_as_it_says(recorded: tuple[Path, dict, pd.DataFrame]) -> None:
    folder, table, _ = recorded
    assert (folder / table["lfp"]).stat().st_size == 28 * 2500 * 385 * 2
    assert table["skip_channels"] == [384]


def test_the_clock_trace_ticks_and_is_no_potential(recorded: tuple[Path, dict, pd.DataFrame]) -> None:
    clock = _samples(recorded[0], recorded[1])[:, 384]
    assert set(np.unique(clock)) <= {0.0, np.rint(2000 / UV_PER_BIT) * UV_PER_BIT}
    assert np.count_nonzero(np.diff(clock)) == 27


def test_ripples_are_greatest_about_the_pyramidal_layer(recorded: tuple[Path, dict, pd.DataFrame]) -> None:
    folder, table, truth = recorded
    samples = _samples(folder, table)[14 * 2500 :, :384]
    ripple = pd.Series(_band_db(samples, 140, 220) - _band_db(samples, 300, 1000))
    by_channel = truth.set_index("channel").region
    in_hippocampus = by_channel[by_channel.str.startswith(("CA1", "DG"))].index
    best = by_channel[ripple[in_hippocampus].idxmax()]
    assert best in ("CA1p", "CA1o", "CA1r")
    track = truth.set_index("channel").track_depth_um.astype(float)
    middle = track[by_channel == "CA1p"].mean()
    assert abs(track[ripple[in_hippocampus].idxmax()] - middle) < 90


def test_white_matter_and_fluid_hold_few_units(recorded: tuple[Path, dict, pd.DataFrame]) -> None:
    folder, table, truth = recorded
    spikes = pd.read_parquet(folder / table["spikes"])
    assert spikes.time_s.is_monotonic_increasing
    assert spikes.time_s.between(0, 28).all()
    units = spikes.groupby("unit_id").tip_distance_um.median()
    tip = truth.tip_distance_um.astype(float).to_numpy()
    region = truth.region.to_numpy()[np.abs(units.to_numpy()[:, None] - tip).argmin(axis=1)]
    quiet = (
        np.isin(region, ["CCB", "ALV", "FIM", "INC", "outside"]).sum()
        / np.isin(truth.region, ["CCB", "ALV", "FIM", "INC", "outside"]).sum()
    )
    assert quiet < 0.4 * len(units) / len(truth)


def test_artefact_lies_in_the_excluded_interval(recorded: tuple[Path, dict, pd.DataFrame]) -> None:
    folder, table, _ = recorded
    start, stop = np.loadtxt(folder / table["exclude"], delimiter=",", skiprows=1)
    alive = np.median(np.abs(_samples(folder, table)[:, :384]), axis=1)
    t = np.arange(len(alive)) / 2500
    assert np.median(alive[(t > start) & (t < stop)]) > 2000
    assert alive[(t < start) | (t > stop)].max() < 1500


def test_evoked_sinks_come_first_in_layer_4() -> None:
    """Mouse flash responses: middle layers at 50-100 ms (common practice, no source)."""
    recipe = Recipe(seed=2)
    shank = make_penetrations(recipe)[0].shanks[0]
    tissue = make_tissue(recipe, shank)
    rows = np.arange(40.0, 900.0, 20.0)
    potential = row_sources(tissue, rows).evoked
    csd = -np.diff(potential, 2, axis=0)[:, : int(0.3 * 2500)]
    depth, time = np.unravel_index(csd.argmin(), csd.shape)
    middle = tissue.depth_um[tissue.named("L4") > 0]
    middle = middle[middle < 1000]
    assert middle.min() - 30 < rows[1 + depth] < middle.max() + 30
    assert 0.045 < time / 2500 < 0.065


def test_theta_turns_over_between_pyramidal_and_molecular_layers() -> None:
    recipe = Recipe(seed=2)
    shank = make_penetrations(recipe)[0].shanks[0]
    tissue = make_tissue(recipe, shank)
    theta = row_sources(tissue, tissue.depth_um).theta
    top = theta[np.flatnonzero(tissue.named("sp"))].mean()
    low = theta[np.flatnonzero(tissue.named("slm"))].mean()
    assert abs(np.angle(low / top)) > np.radians(130)


def test_truth_lies_on_the_track_by_the_law(recorded: tuple[Path, dict, pd.DataFrame]) -> None:
    truth = recorded[2]
    shank = make_penetrations(RECIPE)[0].shanks[0]
    depth = truth.track_depth_um.astype(float).to_numpy()
    np.testing.assert_allclose(depth, shank.law(truth.tip_distance_um.astype(float)), atol=0.01)
    np.testing.assert_allclose(shank.at(depth), truth[["ap_um", "dv_um", "ml_um"]].astype(float), atol=0.02)
    assert ((truth.in_brain == "true") == (depth >= 0)).all()
    tip = truth.tip_distance_um.astype(float).to_numpy()
    assert (np.diff(depth[np.argsort(tip)]) <= 0).all()


def test_same_seed_same_samples(tmp_path: Path) -> None:
    recipe = replace(RECIPE, seconds=2.0)
    pen = make_penetrations(recipe)[1]
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
        write_recording(tmp_path / name, recipe, pen)
    for file in (tmp_path / "one").iterdir():
        assert file.read_bytes() == (tmp_path / "two" / file.name).read_bytes()


def test_rough_recordings_are_sparser_and_one_says_nothing() -> None:
    kind, harsh = Recipe(seed=3), rough(Recipe(seed=3))
    counts = []
    for recipe in (kind, harsh):
        pen = make_penetrations(recipe)[0]
        sites = pen.design.probe.recorded.tip_distance_um
        units = make_units(recipe, pen.shanks[0], make_tissue(recipe, pen.shanks[0]), sites)
        counts.append(len(units.rate_hz))
    assert counts[1] < 0.7 * counts[0]
    silent = make_tissue(harsh, make_penetrations(harsh)[2].shanks[0])
    assert silent.lies
    assert not silent.named("sp", "L4", "slm").any()
    assert make_timeline(kind).flash_s.max() < kind.seconds

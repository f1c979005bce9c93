"""The score is perfect for a perfect answer and sees each way of being wrong."""

from __future__ import annotations

import shutil
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
import pytest

from leadline.base.errors import LeadlineError
from leadline.demo.calibration import calibration_error, coverage, reliability
from leadline.demo.recipe import Recipe, small
from leadline.demo.run import run_demo
from leadline.demo.score import as_text, score, to_line
from leadline.demo.write import invent, write_brain

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

RECIPE = small(Recipe(seed=5), seconds=0.0, penetrations=2)
WORDS = {"layer": str}


@pytest.fixture(scope="module")
def written(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("scored") / "b"
    write_brain(folder, RECIPE)
    channels = pd.read_csv(folder / "truth/channels.csv", dtype=WORDS, keep_default_na=False)
    channels = channels.assign(p_region=1.0, p_coarse=1.0, track_depth_sd_um=10.0)
    tracks = pd.read_csv(folder / "truth/tracks.csv")
    end = tracks[tracks["mark"] == "dye_end"].set_index(["penetration", "shank"]).track_depth_um
    last = tracks.set_index(["penetration", "shank"]).index.map(end)
    (folder / "out").mkdir()
    channels.to_csv(folder / "out/channels.csv", index=False)
    tracks[tracks.track_depth_um <= last].drop(columns="mark").to_csv(folder / "out/tracks.csv", index=False)
    return folder


@pytest.fixture
def brain(written: Path, tmp_path: Path) -> Path:
    for name in ("out", "truth"):
        shutil.copytree(written / name, tmp_path / name)
    return tmp_path


def _score(folder: Path):
    made = invent(RECIPE)
    return score(folder, lambda points: made.chart(made.frame.to_pir(points)))


def _edit(file: Path, change: Callable[[pd.DataFrame], pd.DataFrame]) -> None:
    change(pd.read_csv(file, dtype=WORDS, keep_default_na=False)).to_csv(file, index=False)


def test_perfect_answers_score_perfectly(brain: Path) -> None:
    got = _score(brain)
    assert max(got.registration_um) < 0.05
    t, c = got.tracks, got.channels
    assert (t.true, t.found, t.swapped, t.false) == (5, 5, 0, 0)
    assert max(t.median_um, t.p95_um, t.entry_um, t.end_um) < 0.5
    assert c.p95_um < 0.5
    assert (c.region, c.coarse, c.layer, c.in_brain, c.covered) == (1, 1, 1, 1, 1)
    assert c.calibration == 0
    assert c.histology_um[0] > 10
    assert set(got.penetrations) == {"A", "B"}


def test_deeper_channels_are_a_depth_error_and_miss_their_interval(brain: Path) -> None:
    tracks = pd.read_csv(brain / "truth/tracks.csv")
    columns = ["ap_um", "dv_um", "ml_um"]

    def deeper(table: pd.DataFrame) -> pd.DataFrame:
        for (name, shank), line in tracks.groupby(["penetration", "shank"]):
            rows = table.index[(table.penetration == name) & (table.shank == shank)]
            at = table.loc[rows, "track_depth_um"] + 60
            for column in columns:
                table.loc[rows, column] = np.interp(at, line.track_depth_um, line[column])
        return table[table.in_brain.astype(str).str.lower() == "true"]

    _edit(brain / "out/channels.csv", deeper)
    got = _score(brain).channels
    assert got.median_um == pytest.approx(60, abs=3)
    assert got.covered < 0.1
    assert got.region == 1


def test_overconfidence_is_seen(brain: Path) -> None:
    def wrong(table: pd.DataFrame) -> pd.DataFrame:
        table.loc[::2, ["region_id", "coarse_region", "layer"]] = [1, "nowhere", "9"]
        return table

    _edit(brain / "out/channels.csv", wrong)
    got = _score(brain).channels
    for share in (got.region, got.coarse, got.layer, got.calibration):
        assert share == pytest.approx(0.5, abs=0.02)


def test_swapped_false_and_missed_tracks_are_told_apart(brain: Path) -> None:
    def mix(table: pd.DataFrame) -> pd.DataFrame:
        first, last = (table.penetration == "B") & (table.shank == 0), (table.penetration == "B") & (table.shank == 3)
        table.loc[first, "shank"], table.loc[last, "shank"] = 3, 0
        table.loc[(table.penetration == "B") & (table.shank == 2), "s0_um"] += 500.0
        return table[table.penetration != "A"]

    _edit(brain / "out/tracks.csv", mix)
    got = _score(brain).tracks
    assert (got.true, got.found, got.swapped, got.false) == (5, 1, 2, 1)


def test_a_long_track_is_an_end_error(brain: Path) -> None:
    _edit(brain / "out/tracks.csv", lambda t: t.groupby(["penetration", "shank"]).head(-5).reset_index(drop=True))
    got = _score(brain).tracks
    assert got.end_bias_um < -60
    assert got.end_um == pytest.approx(-got.end_bias_um)


def test_text_says_what_was_scored(brain: Path) -> None:
    text = as_text(_score(brain))
    assert "5 of 5 found" in text
    assert "100.0%" in text
    assert max(len(line) for line in text.splitlines()) < 110


def test_nothing_to_score_is_an_error_that_says_so(brain: Path) -> None:
    (brain / "out/channels.csv").unlink()
    with pytest.raises(LeadlineError, match="has not been run"):
        score(brain)
    shutil.rmtree(brain / "truth")
    with pytest.raises(LeadlineError, match="holds no truth"):
        score(brain)


def test_nearest_place_on_a_bent_line() -> None:
    line = np.array([[0.0, 0, 0], [0, 400, 0], [0, 400, 400]])
    place, far = to_line(np.array([[5.0, 50, 0], [0, 400, 450], [0, -30, 4], [0, 407, 60]]), line)
    np.testing.assert_allclose(place, [50, 850, -30, 460], atol=1e-6)
    np.testing.assert_allclose(far, [5, 0, 4, 7], atol=1e-6)


def test_calibration_of_known_cases() -> None:
    rng = np.random.default_rng(0)
    p = rng.uniform(0, 1, 200000)
    right = rng.uniform(0, 1, p.size) < p
    assert calibration_error(p, right) < 0.005
    assert calibration_error(np.ones(10), np.zeros(10)) == 1
    table = reliability([0.05, 0.95, 1.0], [0, 1, 1])
    np.testing.assert_allclose(table, [[0.05, 0, 1], [0.975, 1, 2]])
    assert coverage(rng.standard_normal(100000), np.ones(100000)) == pytest.approx(0.90, abs=0.005)


def test_demo_runs_what_it_is_given_and_prints_the_score(written: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """With the writing and the registration replaced; the whole way is tested end to end."""
    seen: list[Path] = []
    made = invent(RECIPE)
    monkeypatch.setattr("leadline.demo.run.write_brain", lambda *_: None)
    monkeypatch.setattr("leadline.demo.score._carrier", lambda _: lambda points: made.chart(made.frame.to_pir(points)))
    text = run_demo(written, 5, run=lambda folder, _: seen.append(folder))
    assert seen == [written]
    assert "tracks" in text

"""Inputs that can be read and cannot be right, as ``leadline check`` says them; tracks against plans."""

from __future__ import annotations

import json
import shutil

import numpy as np
import pytest
from tests.good_brain import BRAIN_TOML, MIDLINE_UM, entry_um, tip_um, write_good_brain

from leadline.io.brainfile import read_brain
from leadline.model.track import Track
from leadline.pipeline import contradictions
from leadline.pipeline.bench import Bench
from leadline.pipeline.check import check
from leadline.tracing.assign import TracedPath, Wanted

PLANNED = 'points = "a_points.csv"\nentry_near_um = {}'


@pytest.fixture(scope="module")
def good(tmp_path_factory):
    return write_good_brain(tmp_path_factory.mktemp("good") / "brain").parent


@pytest.fixture
def folder(good, tmp_path):
    return shutil.copytree(good, tmp_path / "brain")


def noted(folder, *changes):
    """Notes of ``check`` after changes to the text of brain.toml."""
    text = BRAIN_TOML
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    (folder / "brain.toml").write_text(text)
    found = check(read_brain(folder))
    assert found.faults == ()
    return "\n".join(found.notes)


def planned(entry):
    return 'points = "a_points.csv"', PLANNED.format([float(x) for x in entry])


def test_a_good_brain_with_a_plan_has_no_notes(folder):
    assert noted(folder, planned(entry_um())) == ""


def test_a_brain_without_a_plan_is_told_what_nothing_would_show(folder):
    assert noted(folder).startswith("no penetration states entry_near_um")


@pytest.mark.parametrize("entry", [entry_um() / 1000, 3 * entry_um(), -entry_um()])
def test_a_plan_far_from_the_brain_is_said(folder, entry):
    assert "from the surface of the atlas's brain" in noted(folder, planned(entry))


def test_an_insertion_in_millimetres_is_said(folder):
    notes = noted(folder, planned(entry_um()), ("tip_offset_um = 100.0", "tip_offset_um = 100.0\ninserted_um = 1.7"))
    assert notes == "penetration A: inserted_um is 1.7; it is in micrometres"


def test_a_probe_file_in_the_wrong_unit_is_said(folder):
    file = folder / "probe_a.json"
    probe = json.loads(file.read_text())
    sites = np.array(probe["probes"][0]["contact_positions"])
    for factor in (1e-3, 25.0):
        probe["probes"][0]["contact_positions"] = (factor * sites).tolist()
        file.write_text(json.dumps(probe))
        assert "look at si_units" in noted(folder, planned(entry_um()), ('spikes = "a_spikes.csv"', ""))


def test_an_anchor_off_the_probe_is_said(folder):
    notes = noted(folder, planned(entry_um()), ("tip_distance_um = 1140.0", "tip_distance_um = 11400.0"))
    assert "an anchor stands at tip distance 11400 um, contacts from 100 to 1650 um" in notes


def test_one_recording_given_twice_is_said_under_any_name(folder):
    shutil.copy(folder / "a_lfp.bin", folder / "b_lfp.bin")
    start, stop = BRAIN_TOML.index("[[penetration]]"), BRAIN_TOML.index("[[anchor]]")
    second = BRAIN_TOML[start:stop].replace('name = "A"', 'name = "B"').replace("a_lfp", "b_lfp")
    for file in ("spikes", "points"):
        text = (folder / f"a_{file}.csv").read_text()
        (folder / f"b_{file}.csv").write_text(text + text.splitlines()[-1] + "\n")
        second = second.replace(f"a_{file}", f"b_{file}")
    notes = noted(folder, planned(entry_um()), ("[[anchor]]", second + "[[anchor]]"))
    assert "penetration A: a_lfp.bin holds the same as b_lfp.bin of penetration B" in notes
    assert "penetration B: b_lfp.bin holds the same" in notes
    assert "spikes" not in notes


def track(ends):
    points = np.linspace(*ends, 30)
    return Track("A", 0, points, points, np.full(30, 20.0), 25.0, 25.0)


def test_tracks_are_held_against_the_plan_and_the_brain(folder):
    noted(folder, planned(entry_um()))
    bench = Bench(read_brain(folder))
    ends = np.array([entry_um(), tip_um()])
    wanted = [Wanted("A", entry_near_um=tuple(entry_um()))]
    assert contradictions.of_tracks(bench, [track(ends)], [TracedPath(ends)], wanted) == ()
    mirrored = ends * [1, 1, -1] + [0, 0, 2 * MIDLINE_UM]
    (sentence,) = contradictions.of_tracks(bench, [track(mirrored)], [TracedPath(mirrored)], wanted)
    assert "mirrored left to right" in sentence
    away = ends - [0, 2000, 0]
    assert "of its track lies outside the brain" in contradictions.of_tracks(bench, [track(away)], [], wanted)[0]

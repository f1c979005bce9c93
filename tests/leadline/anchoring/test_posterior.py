"""The posterior over depth maps: better than histology where the recording speaks, honest where it does not."""

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))

import invented

from leadline.anchoring.knowledge import builtin
from leadline.anchoring.posterior import infer
from leadline.base.errors import LeadlineError
from leadline.base.progress import Cancelled
from leadline.model.anchor import Anchor

TRUE = invented.truth(invented.TIP)


def found(*shanks, **settings):
    return infer(shanks, invented.STRUCTURES, builtin(), **settings)


@pytest.fixture(scope="module")
def spoken():
    return found(invented.shank())[0]


def test_a_telling_recording_beats_histology_and_knows_how_well(spoken):
    histology = np.abs(2050.0 - invented.TIP - TRUE)
    error = np.abs(spoken.median_um - TRUE)
    assert np.median(error) < 0.4 * np.median(histology)
    assert (error <= 2.5 * spoken.sd_um).mean() > 0.9
    assert spoken.informed > 0.9
    assert spoken.sd_um.mean() < 80


def test_labels_of_the_draws_name_the_true_structures(spoken):
    ids = np.unique(spoken.label_id)
    share = np.array([(spoken.label_id == i).mean(axis=0) for i in ids])
    assert (ids[share.argmax(axis=0)] == invented.label(TRUE)).mean() > 0.85


def test_every_draw_falls_along_the_shank(spoken):
    assert (np.diff(spoken.depth_um, axis=1) < 0).all()


def test_same_seed_same_bytes_and_another_seed_nearly_the_same(spoken):
    again, other = found(invented.shank())[0], found(invented.shank(), seed=2)[0]
    assert again.depth_um.tobytes() == spoken.depth_um.tobytes()
    assert again.label_id.tobytes() == spoken.label_id.tobytes()
    shift = np.abs(other.median_um - spoken.median_um)
    assert 0 < np.median(shift) < 12


def test_a_penetration_does_not_depend_on_the_others(spoken):
    other = replace(invented.shank(seed=5), penetration="B", profile=None)
    both = found(other, invented.shank())
    assert [p.penetration for p in both] == ["B", "A"]
    assert both[1].depth_um.tobytes() == spoken.depth_um.tobytes()


def test_without_physiology_the_draws_are_the_prior_about_one_to_one():
    plain = found(invented.shank(), physiology=False)[0]
    assert plain.informed == 0.0
    assert np.abs(plain.median_um - (2050.0 - invented.TIP)).max() < 12
    assert (np.abs(plain.median_um - TRUE) < 1.645 * plain.sd_um).all()
    assert 120 < plain.sd_um[0] < 260


def test_a_recording_of_noise_gives_back_histology():
    silent = [found(invented.shank(seed=s, signal=0.0), draws=200)[0] for s in (1, 2, 3, 4)]
    plain = found(invented.shank(with_profile=False), draws=200)[0]
    assert np.mean([s.informed for s in silent]) < 0.4
    assert np.median([s.sd_um.mean() for s in silent]) > 0.6 * plain.sd_um.mean()


def test_an_anchor_is_taken_in_and_one_moved_a_little_moves_the_answer_a_little():
    def anchored(shift):
        anchor = Anchor("A", 0, 1000.0, invented.truth(1000.0) + shift, 20.0)
        return found(invented.shank(anchors=(anchor,)), physiology=False)[0]

    at = np.searchsorted(invented.TIP, 1000.0)
    here, moved = anchored(0.0), anchored(3.0)
    assert here.median_um[at] == pytest.approx(invented.truth(1000.0), abs=20)
    assert here.sd_um[at] < 35
    moves = np.abs(moved.median_um - here.median_um)
    assert np.median(moves) < 4
    assert moves.max() < 10


def test_crossing_anchors_are_refused():
    anchors = (Anchor("A", 0, 500.0, 900.0), Anchor("A", 0, 900.0, 1000.0))
    with pytest.raises(LeadlineError, match="anchors cross"):
        found(invented.shank(anchors=anchors))


def test_sister_shanks_place_one_that_says_nothing():
    silent = invented.shank(1, seed=9, with_profile=False, end_um=2150.0)
    alone = found(silent)[0]
    sister = found(invented.shank(), silent)[1]
    true = invented.truth(invented.TIP, end_um=2150.0)
    assert sister.sd_um.mean() < 0.7 * alone.sd_um.mean()
    assert np.median(np.abs(sister.median_um - true)) < np.median(np.abs(alone.median_um - true))


def test_the_work_can_be_cancelled():
    class Stop:
        def begin(self, label, total):
            pass

        def say(self, message):
            pass

        def step(self, amount=1.0):
            raise Cancelled

    with pytest.raises(Cancelled):
        found(invented.shank(), progress=Stop())


def test_a_recording_that_follows_the_labels_less_well_is_trusted_less(spoken):
    """Gradients inside structures and a landmark that is not there: the answer must widen by itself."""
    shank = invented.shank()
    rng = np.random.default_rng(7)
    true = invented.label(TRUE)
    rough = {}
    for name, values in shank.profile.features.items():
        bent = values.copy()
        for label in np.unique(true):
            here = np.flatnonzero(true == label)
            bent[here] += rng.normal(0, 0.9) * np.linspace(-1, 1, here.size)
        bent[true == 5] = bent[true == 4].mean()
        rough[name] = bent + 0.6 * np.convolve(rng.standard_normal(TRUE.size + 8), np.ones(9) / 3, "valid")
    bent = found(replace(shank, profile=replace(shank.profile, features=rough)))[0]
    assert spoken.diagnostics["trust"] > 0.9
    assert bent.diagnostics["trust"] < 0.7
    assert bent.sd_um.mean() > 1.2 * spoken.sd_um.mean()

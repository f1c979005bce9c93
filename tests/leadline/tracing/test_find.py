"""Whole tracing on invented tissue: all found, none invented, ends where they are, whatever the frame."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import phantom
import pytest
from scoring import score

from leadline.base.errors import LeadlineError
from leadline.model.settings import TraceSettings
from leadline.model.volume import Volume
from leadline.tracing.find import trace

SMALL = phantom.Conditions(size_um=(3600.0, 3800.0, 3600.0), singles=1, shanks=2, vessels=8, pools=2, bubbles=2)


@pytest.fixture(scope="module")
def sample():
    made = phantom.make(51, SMALL)
    return made, trace(made.dye, made.background, settings=TraceSettings())


def test_every_track_is_found_and_none_invented(sample):
    made, found = sample
    result = score(made.tracks, found)
    assert result.missed == ()
    assert result.invented == ()


def test_tracks_lie_on_the_truth(sample):
    """The bars of the work order: 10 um median and 30 um at the 95th percentile, ends within 40 um (medians)."""
    made, found = sample
    matched = score(made.tracks, found).matched
    gaps = np.concatenate([m.gap_um for m in matched])
    assert np.median(gaps) < 10
    assert np.quantile(gaps, 0.95) < 30
    assert np.median([abs(m.entry_error_um) for m in matched]) < 40
    assert np.median([abs(m.end_error_um) for m in matched]) < 40


def test_ends_are_within_three_stated_sd(sample):
    made, found = sample
    for m in score(made.tracks, found).matched:
        assert abs(m.entry_error_um) < 3 * m.entry_sd_um
        assert abs(m.end_error_um) < 3 * m.end_sd_um


def test_traces_run_from_the_surface_inward(sample):
    for t in sample[1]:
        assert t.points_um[0, 1] < t.points_um[-1, 1]  # PIR: axis 1 grows inward from the dorsal surface
        assert t.coverage > 0.5
        assert t.contrast > 5


def test_another_orientation_and_origin_gives_the_same_tracks():
    """A stored order is no more than that: the same phantom, stored otherwise, gives as many tracks as near."""
    made = phantom.make(51, replace(SMALL, code="LSA"))
    shift = np.array([1000.0, -500.0, 20.0])
    moved = [replace(v, origin_um=shift) for v in (made.dye, made.background)]
    tracks = tuple(replace(t, points_um=t.points_um + shift) for t in made.tracks)
    result = score(tracks, trace(*moved))
    assert result.missed == ()
    assert result.invented == ()
    assert np.median(np.concatenate([m.gap_um for m in result.matched])) < 10


def test_anisotropic_voxels():
    made = phantom.make(52, replace(SMALL, voxel_um=(50.0, 28.0, 36.0), shanks=0))
    result = score(made.tracks, trace(made.dye, made.background))
    assert result.missed == ()
    assert result.invented == ()


def test_no_dye_gives_no_track():
    made = phantom.make(53, replace(SMALL, singles=0, shanks=0))
    assert trace(made.dye, made.background) == ()


def test_the_same_input_gives_the_same_traces(sample):
    made, found = sample
    again = trace(made.dye, made.background)
    assert len(again) == len(found)
    for a, b in zip(again, found, strict=True):
        np.testing.assert_array_equal(a.points_um, b.points_um)


def test_blocks_do_not_change_the_answer(sample, monkeypatch):
    """Blocks of another size give the same traces, to the last bit."""
    from leadline.tracing import autofluorescence, grid, ridge

    made, found = sample
    monkeypatch.setattr(ridge, "BLOCK", 47)
    monkeypatch.setattr(grid, "SLAB_VOXELS", 100_000)
    monkeypatch.setattr(autofluorescence, "SLAB", 7)
    again = trace(made.dye, made.background)
    assert len(again) == len(found)
    for a, b in zip(again, found, strict=True):
        np.testing.assert_array_equal(a.points_um, b.points_um)


def test_an_empty_background_is_refused():
    dye = Volume(np.random.default_rng(0).normal(100, 5, (20, 20, 20)), np.full(3, 36.0), "PIR")
    flat = Volume(np.full((20, 20, 20), 7, np.uint16), np.full(3, 36.0), "PIR")
    with pytest.raises(LeadlineError, match=r"one grey value only \(7\)"):
        trace(dye, flat)


def test_a_stack_of_another_shape_is_refused():
    one = Volume(np.zeros((4, 4, 4)), np.full(3, 36.0), "PIR")
    two = Volume(np.zeros((4, 4, 5)), np.full(3, 36.0), "PIR")
    with pytest.raises(LeadlineError, match="two channels of the same stack"):
        trace(one, two)

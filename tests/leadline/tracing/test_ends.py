"""The run of dye, its end, and the entry, on profiles with a known answer."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import ndtr

from leadline.model.volume import Volume
from leadline.tracing import ends

STEP = 20.0
S = np.arange(0, 4000, STEP)


def profile(amount, noise=0.2):
    return ends.DyeProfile(np.asarray(amount, float), np.asarray(amount, float), noise, noise, noise)


def line(end, sigma=30.0, level=10.0):
    """A line source of even dye, blurred: half at its end."""
    return level * ndtr((end - S) / sigma) * (S > 300)


def test_the_run_bridges_a_gap_and_stops_at_noise():
    amount = line(3000.0)
    amount[(S > 1500) & (S < 1800)] = 0
    first, last = ends.dye_run(profile(amount), np.zeros(len(S), bool))
    assert abs(S[first] - 300) < 60
    assert abs(S[last] - 3000) < 80


def test_a_vessel_off_centre_beyond_the_end_does_not_lengthen_the_run():
    amount = line(2500.0)
    amount[(S > 2700) & (S < 3400)] = 9.0
    suspect = (S > 2650) & (S < 3450)
    _, last = ends.dye_run(profile(amount), suspect)
    assert S[last] < 2700


@settings(max_examples=30, deadline=None)
@given(st.floats(1500, 3500), st.floats(15, 45), st.floats(5, 60))
def test_the_end_of_an_even_line_is_found_to_fifteen_micrometres(end, sigma, level):
    amount = profile(line(end, sigma, level))
    at, sd = ends.dye_end(amount, ends.dye_run(amount, np.zeros(len(S), bool)), STEP, sigma)
    assert abs(at * STEP - end) < 15
    assert 12 < sd < 70


@pytest.mark.parametrize("share", [0.25, 0.5])
def test_a_faint_tip_is_followed_to_its_end(share):
    amount = line(3000.0) * np.where(S > 2600, share, 1.0)
    at, _ = ends.dye_end(profile(amount), (16, 151), STEP, 30.0)
    assert abs(at * STEP - 3000) < 25


def test_a_weak_halo_beyond_the_end_is_not_followed():
    amount = line(3000.0) + 1.0 * np.exp(-((S - 3000) ** 2) / (2 * 90.0**2))
    got = profile(amount)
    at, _ = ends.dye_end(got, ends.dye_run(got, np.zeros(len(S), bool)), STEP, 30.0)
    assert abs(at * STEP - 3000) < 40


def test_doubt_grows_with_noise():
    sharp, poor = (ends.dye_end(profile(line(3000.0, level=4.0), n), (16, 150), STEP, 30.0)[1] for n in (0.05, 0.5))
    assert poor > 2 * sharp


@pytest.mark.parametrize("lean", [0.0, 0.35])
def test_the_entry_is_where_the_surface_is(lean):
    """A flat surface at axis 1 = 800 um, blurred and noisy, met at an angle: within a third of a voxel."""
    rng = np.random.default_rng(4)
    depth = np.arange(70)[None, :, None] * 36.0 - 800.0
    grey = 100 + 400 * ndtr(depth / 25) + rng.normal(0, 25, (60, 70, 60))
    volume = Volume(grey.astype(np.float32), np.full(3, 36.0), "PIR")
    way = np.array([np.sin(lean), np.cos(lean), 0.0])
    s = np.arange(-700, 1500, STEP)
    curve = np.array([900.0, 800.0, 1000.0]) + s[:, None] * way
    got = ends.entry(curve, STEP, 38, volume, 300.0)
    assert got is not None
    assert abs(got.at_um - 700) < 12
    assert 5 < got.sd_um < 40


def test_no_surface_no_entry():
    volume = Volume(np.full((60, 60, 60), 500.0, np.float32), np.full(3, 36.0), "PIR")
    curve = np.array([1000.0, 300.0, 1000.0]) + np.arange(0, 1200, STEP)[:, None] * [0.0, 1.0, 0.0]
    assert ends.entry(curve, STEP, 5, volume, 300.0) is None

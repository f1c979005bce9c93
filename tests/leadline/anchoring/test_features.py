"""Profiles made ready for inference."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from leadline.anchoring.features import prepare, prepare_probe
from leadline.model.profile import Profile

TIP = 175.0 + 20.0 * np.arange(60)


def profile(flags=(), **features):
    return Profile("A", np.zeros(TIP.size, int), TIP, features, flags)


def test_pairs_of_rows_are_averaged_and_scaled():
    ready = prepare(profile(gamma_power_db=np.sin(TIP / 150.0) * 7 + 40))
    values = ready.values["lfp"]
    assert values.shape == (1, 30)
    assert np.diff(ready.tip_distance_um) == pytest.approx(40.0)
    assert values.std() == pytest.approx(1.0)
    assert np.corrcoef(values[0], np.sin(ready.tip_distance_um / 150.0))[0, 1] > 0.999


def test_one_wild_row_changes_little():
    calm = np.sin(TIP / 150.0)
    wild = calm.copy()
    wild[30] += 1000.0
    a, b = (prepare(profile(gamma_power_db=v)).values["lfp"][0] for v in (calm, wild))
    assert np.abs(a - b).max() < 0.4


def test_dead_rows_and_gaps_are_filled_over():
    smooth = np.sin(TIP / 300.0)
    holed = smooth.copy()
    holed[20:24] = np.nan
    flags = tuple("dead" if 40 <= i < 43 else "" for i in range(TIP.size))
    broken = np.where(np.array(flags) == "dead", -50.0, holed)
    a = prepare(profile(gamma_power_db=smooth))
    b = prepare(profile(flags, gamma_power_db=broken))
    filled = np.interp(a.tip_distance_um, b.tip_distance_um, b.values["lfp"][0])
    assert np.abs(filled - a.values["lfp"][0]).max() < 0.15


def test_features_that_cannot_speak_are_left_out():
    mostly_missing = np.where(np.arange(TIP.size) < 40, np.nan, np.sin(TIP))
    ready = prepare(profile(delta_power_db=np.full(TIP.size, 3.0), theta_power_db=mostly_missing))
    assert not ready.informative
    assert ready.values["lfp"].shape == (0, 30)


def test_an_angle_gives_its_cosine_and_sine():
    ready = prepare(profile(theta_phase_rad=np.linspace(-3.0, 3.0, TIP.size)))
    assert ready.names["lfp"] == ("theta_phase_rad", "theta_phase_rad")


def test_no_profile_or_too_few_rows_say_nothing():
    assert not prepare(None).informative
    few = Profile("A", np.zeros(5, int), TIP[:5], {"gamma_power_db": np.arange(5.0)})
    assert not prepare(few).informative


@given(st.floats(0.01, 1e4), st.floats(-1e4, 1e4), st.integers(0, 50))
def test_gain_and_offset_of_a_feature_do_not_matter(gain, offset, seed):
    values = np.random.default_rng(seed).standard_normal(TIP.size)
    a, b = (prepare(profile(spike_rate_hz=v)).values["units"] for v in (values, values * gain + offset))
    assert a == pytest.approx(b, abs=1e-5)


def test_shanks_of_one_probe_are_scaled_as_one_and_keep_what_most_of_them_have():
    loud, soft = profile(gamma_power_db=np.sin(TIP / 150.0) + 3.0), profile(gamma_power_db=np.sin(TIP / 150.0))
    a, b, nothing = prepare_probe([loud, soft, None])
    assert not nothing.informative
    gap = a.values["lfp"][0] - b.values["lfp"][0]
    assert gap.min() > 1.0
    assert np.ptp(gap) < 0.5 * np.ptp(a.values["lfp"][0])
    lone = profile(gamma_power_db=np.sin(TIP / 150.0), delta_power_db=np.cos(TIP / 90.0))
    assert all(f.names["lfp"] == ("gamma_power_db",) for f in prepare_probe([lone, soft, loud]))

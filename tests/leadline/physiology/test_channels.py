import numpy as np
import pytest
from tests.leadline.physiology.invented import InMemory, column

from leadline.model.settings import ProfileSettings
from leadline.physiology.channels import bad_channels, outside_rows
from leadline.physiology.chunks import plan
from leadline.physiology.rows import rows_of
from leadline.physiology.spectrum import field_statistics


@pytest.fixture(scope="module")
def made():
    return column(seed=11, seconds=15, events=0)


def judged(made, samples):
    traces = InMemory(samples, 2500.0)
    chosen = plan(traces, np.zeros((0, 2)))
    return bad_channels(field_statistics(traces, made.probe.channel, chosen, ProfileSettings()), made.probe)


def test_a_sound_recording_has_no_bad_channel_not_even_in_thin_or_silent_layers(made):
    dead, noisy = judged(made, made.recording.traces.samples)
    assert not dead.any()
    assert not noisy.any()


@pytest.mark.parametrize(
    ("spoil", "which"),
    [
        (lambda x, rng: np.zeros_like(x), "dead"),
        (lambda x, rng: rng.normal(0, 2.0, x.shape), "dead"),
        (lambda x, rng: 0.05 * x + rng.normal(0, 5.0, x.shape), "dead"),
        (lambda x, rng: x + rng.normal(0, 60.0, x.shape), "noisy"),
        (lambda x, rng: x + rng.normal(0, 400.0, x.shape), "noisy"),
    ],
)
def test_channels_spoilt_in_many_ways_are_found_alone(made, spoil, which):
    rng = np.random.default_rng(1)
    samples = made.recording.traces.samples.copy()
    bad = np.array([5, 30, 31, 70])
    samples[:, bad] = spoil(samples[:, bad], rng)
    dead, noisy = judged(made, samples)
    assert np.flatnonzero(dead if which == "dead" else noisy).tolist() == bad.tolist()
    assert not (noisy if which == "dead" else dead).any()


def test_another_gain_is_no_fault(made):
    samples = made.recording.traces.samples.copy()
    samples[:, 40] *= 1.3
    dead, noisy = judged(made, samples)
    assert not (dead | noisy).any()


def test_rows_in_air_and_in_saline_are_outside_until_the_first_units(made):
    rows = rows_of(made.probe)
    n = len(rows)
    inside = np.full((n, n), 0.9) + 0.1 * np.eye(n)
    level = np.full(n, 30.0)
    assert not outside_rows(rows, inside, level).any()
    air = inside.copy()
    air[-6:, :] = air[:, -6:] = 0.05
    air[-6:, -6:] = np.eye(6)
    assert outside_rows(rows, air, level).tolist() == [False] * (n - 6) + [True] * 6
    saline = level.copy()
    saline[-5:] = 10.0
    assert outside_rows(rows, inside, saline).sum() == 5
    units = np.zeros(n)
    units[-3] = 2.0
    assert not outside_rows(rows, air, level, units)[:-2].any()


def test_a_silent_stretch_further_down_is_not_outside(made):
    rows = rows_of(made.probe)
    level = np.full(len(rows), 30.0)
    level[10:20] = 0.0
    level[:4] = 0.0
    assert not outside_rows(rows, None, level).any()

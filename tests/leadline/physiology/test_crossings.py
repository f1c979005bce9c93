from dataclasses import replace

import numpy as np
import pytest
from tests.leadline.physiology.invented import InMemory, line_probe

from leadline.model.recording import Events, Recording, Spikes
from leadline.model.settings import ProfileSettings
from leadline.physiology import profile_of
from leadline.physiology.chunks import plan
from leadline.physiology.crossings import Detector, detector_for, peaks
from leadline.physiology.rows import rows_of

RATE = 30_000.0
NOTHING = np.zeros((0, 2))
SETTINGS = ProfileSettings()
SHAPE = -np.exp(-0.5 * ((np.arange(45) - 15) / 3.0) ** 2) + 0.3 * np.exp(-0.5 * ((np.arange(45) - 27) / 6.0) ** 2)


def wideband(seed, n_contacts=24, seconds=8.0, noise_uv=8.0, common_uv=0.0):
    """Slow fields, noise and, if asked for, noise that all contacts share."""
    rng = np.random.default_rng(seed)
    n = int(seconds * RATE)
    slow = 300.0 * np.sin(2 * np.pi * 7.0 * np.arange(n) / RATE)[:, None]
    samples = slow + noise_uv * rng.standard_normal((n, n_contacts), np.float32)
    return (samples + common_uv * rng.standard_normal((n, 1))).astype(np.float32)


def add_spikes(samples, contact, times_s, size_uv):
    """A spike on a contact, half as large on its neighbours."""
    for at in np.round(np.asarray(times_s) * RATE).astype(int):
        for k, share in ((contact, 1.0), (contact - 1, 0.5), (contact + 1, 0.5)):
            if 0 <= k < samples.shape[1]:
                samples[at - 15 : at + 30, k] += size_uv * share * SHAPE
    return samples


def regular(rate_hz, seconds, seed=0):
    """Times of a neuron that never fires twice within 20 ms."""
    rng = np.random.default_rng(seed)
    return np.arange(0.1, seconds - 0.1, 1 / rate_hz) + rng.uniform(
        -0.01, 0.01, len(np.arange(0.1, seconds - 0.1, 1 / rate_hz))
    )


def found_peaks(samples, threshold_uv=60.0, pitch_um=40.0):
    probe = line_probe(samples.shape[1], pitch_um)
    traces = InMemory(samples, RATE)
    near = detector_for(traces, probe, plan(InMemory(samples[::12], RATE / 12), NOTHING), 12).near
    detector = Detector(RATE, np.full(samples.shape[1], threshold_uv, np.float32), near)
    return peaks(detector, np.ascontiguousarray(samples.T), 108)


def test_every_spike_is_found_once_where_and_when_it_is_largest():
    times = regular(10, 2.0)
    samples = add_spikes(wideband(1, seconds=2.0), 7, times, 200.0)
    at, contact, depth_uv = found_peaks(samples)
    assert set(contact) == {7}
    assert np.abs(np.sort(at) + 108 - np.round(times * RATE)).max() <= 2
    # the running mean takes some per cent of a spike away
    assert np.median(depth_uv) == pytest.approx(195, rel=0.08)


def test_two_neurons_at_once_are_two_where_they_stand_apart_and_one_where_they_do_not():
    times = regular(10, 2.0)
    apart = add_spikes(add_spikes(wideband(2, seconds=2.0), 4, times, 200.0), 15, times, 150.0)
    assert np.bincount(found_peaks(apart)[1], minlength=24)[[4, 15]].tolist() == [len(times)] * 2
    beside = add_spikes(add_spikes(wideband(2, seconds=2.0), 4, times, 200.0), 5, times + 0.0001, 150.0)
    assert np.bincount(found_peaks(beside)[1], minlength=24)[4:6].tolist() == [len(times), 0]


def test_the_noise_is_that_of_each_contact_whatever_its_spikes_and_what_all_share():
    samples = wideband(3, noise_uv=10.0, common_uv=30.0)
    samples[:, 5] *= 2.0
    samples = add_spikes(samples, 12, regular(40, 8.0), 300.0)
    traces = InMemory(samples, RATE)
    chosen = plan(InMemory(samples[::12], RATE / 12), NOTHING)
    threshold = detector_for(traces, line_probe(24), chosen, 12).threshold_uv
    # white noise less a running mean of 64 samples keeps 1 - 1/64 of its power; the median of 24 adds a little
    assert np.median(threshold) == pytest.approx(5 * 10.0, rel=0.06)
    assert threshold[12] == pytest.approx(np.median(threshold), rel=0.15)
    assert threshold[5] > 1.7 * np.median(threshold)


def test_noise_alone_hardly_crosses():
    """Gaussian noise crosses five standard deviations some hundredths of a time a second, spikes several times."""
    samples = wideband(4, n_contacts=24, seconds=10.0)
    profile, _ = profile_of("A", line_probe(24), [Recording(InMemory(samples, RATE))], settings=SETTINGS)
    assert np.nanmean(profile.features["crossing_density_hz_per_100um"]) < 0.4
    assert np.isnan(profile.features["crossing_amplitude_uv"]).all()


def test_the_density_is_that_of_the_neurons_there():
    """Eight neurons of 5 Hz, one a contact 40 um apart, are 12.5 spikes a second per 100 um."""
    samples = wideband(5, n_contacts=40, seconds=10.0)
    for k in range(10, 18):
        samples = add_spikes(samples, k, regular(5, 10.0, seed=k), 150.0)
    probe = line_probe(40)
    profile, _ = profile_of("A", probe, [Recording(InMemory(samples, RATE))], settings=SETTINGS)
    density = profile.features["crossing_density_hz_per_100um"]
    assert np.median(density[12:16]) == pytest.approx(12.5, rel=0.15)
    assert density[:7].max() < 0.5
    assert density[22:].max() < 0.5
    assert np.nanmedian(profile.features["crossing_amplitude_uv"]) == pytest.approx(145, rel=0.1)
    assert "unit_density_per_100um" not in profile.features


def test_dead_contacts_make_no_dip_and_rows_without_contacts_are_missing():
    samples = wideband(6, n_contacts=40, seconds=10.0)
    for k in range(40):
        samples = add_spikes(samples, k, regular(5, 10.0, seed=k), 150.0)
    whole, _ = profile_of("A", line_probe(40), [Recording(InMemory(samples, RATE))], settings=SETTINGS)
    samples[:, 20] = 0.0
    spoilt, _ = profile_of("A", line_probe(40), [Recording(InMemory(samples, RATE))], settings=SETTINGS)
    a, b = (p.features["crossing_density_hz_per_100um"] for p in (whole, spoilt))
    assert np.isnan(b[20])
    assert np.abs(b / a - 1)[[17, 18, 22, 23]].max() < 0.3


def test_what_crosses_everywhere_at_once_is_no_spike():
    samples = wideband(7, n_contacts=32, seconds=4.0)
    rng = np.random.default_rng(8)
    for at in range(15_000, 105_000, 6_000):
        samples[at : at + 45] += rng.uniform(200, 900, 32) * SHAPE[:, None]
    profile, _ = profile_of("A", line_probe(32, 200.0), [Recording(InMemory(samples, RATE))], settings=SETTINGS)
    assert np.nanmax(profile.features["crossing_density_hz_per_100um"]) < 0.5


def test_the_response_to_events_is_counted():
    event_s = np.arange(0.5, 9.5, 0.5)
    samples = wideband(9, n_contacts=24, seconds=10.0)
    samples = add_spikes(samples, 12, np.concatenate([event_s + d for d in (0.03, 0.06, 0.09)]), 150.0)
    made = Recording(InMemory(samples, RATE), events=Events(event_s, ("flash",) * len(event_s)))
    profile, _ = profile_of("A", line_probe(24), [made], settings=SETTINGS)
    response = profile.features["evoked_rate_hz"]
    assert np.nanargmax(response) == 12
    # three spikes in 190 ms, seen by a kernel of 25 um (1.6 of them per 100 um at its centre)
    assert response[12] == pytest.approx(3 / 0.19 * 1.6, rel=0.1)


def test_sorted_spikes_and_slow_samples_are_left_as_they_are():
    samples = wideband(10, n_contacts=16, seconds=4.0)
    spikes = Spikes(np.array([1.0]), np.array([0]), np.array([300.0]), np.array([0]), ("a",))
    sorted_ones, _ = profile_of("A", line_probe(16), [Recording(InMemory(samples, RATE), spikes)], settings=SETTINGS)
    slow, _ = profile_of("A", line_probe(16), [Recording(InMemory(samples[::12], RATE / 12))], settings=SETTINGS)
    for profile in (sorted_ones, slow):
        assert "crossing_density_hz_per_100um" not in profile.features


def test_a_fraction_counts_the_same_density():
    samples = wideband(11, n_contacts=12, seconds=40.0)
    for k in range(2, 10):
        samples = add_spikes(samples, k, regular(8, 40.0, seed=k), 150.0)
    made = Recording(InMemory(samples, RATE))
    whole, _ = profile_of("A", line_probe(12), [made], settings=SETTINGS)
    part, _ = profile_of("A", line_probe(12), [made], settings=replace(SETTINGS, fraction=0.4))
    a, b = (p.features["crossing_density_hz_per_100um"][3:9] for p in (whole, part))
    assert np.abs(b / a - 1).max() < 0.1
    assert any("of the samples were read" in text for text in part.warnings)


def test_contacts_of_other_shanks_are_no_neighbours():
    two = replace(line_probe(8), shank=np.repeat([0, 1], 4), y_um=np.tile(np.arange(4) * 40.0, 2))
    near = detector_for(
        InMemory(np.zeros((90_000, 8)), RATE), two, plan(InMemory(np.zeros((7500, 8)), 2500.0), NOTHING), 12
    ).near
    assert near.tolist()[0] == [1, -1]
    assert set(near[5]) == {4, 6}
    assert len(rows_of(two)) == 8

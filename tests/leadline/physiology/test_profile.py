from dataclasses import replace

import numpy as np
import pytest
from tests.leadline.physiology.invented import InMemory, by_layer, column, line_probe

from leadline.base.errors import LeadlineError
from leadline.model.probe import Probe
from leadline.model.profile import FEATURE_BY_NAME
from leadline.model.recording import Events, Recording
from leadline.model.settings import ProfileSettings
from leadline.physiology import profile_of

SETTINGS = ProfileSettings()


@pytest.fixture(scope="module")
def made():
    return column(seed=1)


@pytest.fixture(scope="module")
def found(made):
    return profile_of("A", made.probe, [made.recording], settings=SETTINGS)


def test_the_landmarks_of_an_invented_column_stand_where_they_were_put(made, found):
    profile, _ = found
    level = {name: by_layer(values, made) for name, values in profile.features.items()}
    assert max(level["ripple_power_db"], key=level["ripple_power_db"].get) == "pyramidal"
    assert max(level["theta_power_db"], key=level["theta_power_db"].get) == "fissure"
    assert min(level["evoked_csd_ua_per_mm3"], key=level["evoked_csd_ua_per_mm3"].get) == "middle"
    assert min(level["gamma_power_db"], key=level["gamma_power_db"].get) == "white"
    assert max(level["unit_density_per_100um"], key=level["unit_density_per_100um"].get) == "pyramidal"
    assert level["unit_density_per_100um"]["white"] < 0.2


def test_band_powers_are_those_put_in(made, found):
    """Amplitudes of band-limited noise are standard deviations, so its power is their square."""
    level = by_layer(found[0].features["ripple_power_db"], made)
    noise_uv2 = 12.0**2 * 80 / 1250
    assert level["pyramidal"] == pytest.approx(10 * np.log10(25**2 + noise_uv2), abs=1.0)
    theta = by_layer(found[0].features["theta_power_db"], made)
    assert theta["fissure"] == pytest.approx(10 * np.log10(160**2), abs=1.0)


def test_mains_stays_out_of_the_bands(made, found):
    quiet = column(seed=1, mains_uv=0.0)
    without = profile_of("A", quiet.probe, [quiet.recording], settings=SETTINGS)[0]
    difference = found[0].features["gamma_power_db"] - without.features["gamma_power_db"]
    assert np.abs(difference).max() < 0.5


def test_rows_are_sorted_and_nothing_is_flagged_in_a_sound_recording(made, found):
    profile, spectra = found
    assert profile.tip_distance_um.tolist() == made.row_tip_um.tolist()
    assert set(profile.flags) == {""}
    assert spectra.power_uv2_per_hz.shape == (len(profile.shank), spectra.frequency_hz.size)
    assert spectra.event_kind == "flash"
    assert profile.warnings == ()


def test_the_response_has_the_latency_it_was_given(made, found):
    sink = by_layer(found[0].features["sink_latency_s"], made)
    assert sink["middle"] == pytest.approx(0.060, abs=0.004)


def test_latencies_are_missing_row_by_row(made, found):
    """Where there is no sink there is no latency of one, and rows beside it keep theirs."""
    names, sink = np.array(made.layer_of_row), found[0].features["sink_latency_s"]
    assert np.isfinite(sink[names == "middle"]).all()
    assert np.isnan(sink[names == "hilus"]).mean() > 0.7


def test_dead_and_noisy_contacts_are_left_out_and_leave_the_profile_as_it_was(made, found):
    rng = np.random.default_rng(3)
    samples = made.recording.traces.samples.copy()
    samples[:, 11] = 0.0
    samples[:, 20] = rng.normal(0, 1.0, len(samples))
    samples[:, 42:44] += rng.normal(0, 150.0, (len(samples), 2))
    spoilt = replace(made.recording, traces=InMemory(samples, 2500.0))
    profile, _ = profile_of("A", made.probe, [spoilt], settings=SETTINGS)
    assert "2 dead channels were left out: 11, 20" in profile.warnings
    assert "2 noisy channels were left out: 42, 43" in profile.warnings
    assert [i for i, flag in enumerate(profile.flags) if flag] == [21]
    assert profile.flags[21] == "noisy"
    assert np.isnan(profile.features["gamma_power_db"][21])
    sound = np.arange(len(profile.flags)) != 21
    change = profile.features["gamma_power_db"] - found[0].features["gamma_power_db"]
    assert np.abs(change[sound]).max() < 0.5


def test_bands_above_the_sampling_rate_are_missing_not_zero():
    slow = column(seed=2, sampling_hz=500.0, seconds=20)
    profile, _ = profile_of("A", slow.probe, [slow.recording], settings=SETTINGS)
    assert np.isnan(profile.features["high_frequency_power_db"]).all()
    assert np.isfinite(profile.features["gamma_power_db"]).all()
    assert any("no high frequency band" in text for text in profile.warnings)


def test_wideband_gives_the_bands_of_the_fields_in_it():
    wide = column(seed=3, sampling_hz=30000.0, seconds=4, per_row=1, pitch_um=80.0, events=0)
    thin = replace(wide.recording, traces=InMemory(wide.recording.traces.samples[::12], 2500.0))
    fast, _ = profile_of("A", wide.probe, [wide.recording], settings=SETTINGS)
    slow, _ = profile_of("A", wide.probe, [thin], settings=SETTINGS)
    for name in ("theta_power_db", "gamma_power_db"):
        assert np.abs(fast.features[name] - slow.features[name]).max() < 0.6
    # the noise above 1250 Hz, which bare thinning folds into the band, is filtered away: 12 times less
    lower = slow.features["high_frequency_power_db"] - fast.features["high_frequency_power_db"]
    assert np.median(lower) == pytest.approx(10 * np.log10(12), abs=1.0)


def test_no_events_no_spikes_or_nothing_at_all_is_no_error():
    made = column(seed=4, seconds=5, events=0)
    bare = Recording(made.recording.traces)
    profile, spectra = profile_of("A", made.probe, [bare], settings=SETTINGS)
    assert "evoked_csd_ua_per_mm3" not in profile.features
    assert "spike_rate_hz" not in profile.features
    assert spectra.time_s.size == 0
    units_only, _ = profile_of("A", made.probe, [Recording(None, made.recording.spikes)], settings=SETTINGS)
    assert {FEATURE_BY_NAME[name].group for name in units_only.features} == {"units"}
    nothing, _ = profile_of("A", made.probe, [], settings=SETTINGS)
    assert not nothing.features
    assert len(nothing.flags) == len(nothing.tip_distance_um)


def test_events_without_a_response_give_none(made):
    rng = np.random.default_rng(5)
    wrong = replace(made.recording, events=Events(np.sort(rng.uniform(1, 29, 60)), ("tone",) * 60))
    profile, _ = profile_of("A", made.probe, [wrong], settings=SETTINGS)
    assert "evoked_csd_ua_per_mm3" not in profile.features
    assert any("no response" in text for text in profile.warnings)


def test_the_kind_that_answers_is_found_among_others(made):
    rng = np.random.default_rng(6)
    flashes = made.recording.events.time_s
    times = np.concatenate([flashes, rng.uniform(1, 29, 120)])
    kinds = np.array(["flash"] * len(flashes) + ["tone"] * 120)
    order = np.argsort(times)
    mixed = Events(times[order], tuple(kinds[order]))
    profile, spectra = profile_of("A", made.probe, [replace(made.recording, events=mixed)], settings=SETTINGS)
    assert spectra.event_kind == "flash"
    sink = by_layer(profile.features["evoked_csd_ua_per_mm3"], made)
    assert min(sink, key=sink.get) == "middle"


def test_excluded_times_leave_no_trace(made, found):
    samples = made.recording.traces.samples.copy()
    samples[int(10.0 * 2500) : int(12.0 * 2500)] += 5000.0 * np.sign(np.sin(np.arange(5000)))[:, None]
    spoilt = replace(made.recording, traces=InMemory(samples, 2500.0), excluded_s=np.array([[10.0, 12.0]]))
    profile, _ = profile_of("A", made.probe, [spoilt], settings=SETTINGS)
    for name in ("theta_power_db", "gamma_power_db", "ripple_power_db"):
        assert np.abs(profile.features[name] - found[0].features[name]).max() < 1.0


def test_an_artefact_that_nobody_marked_is_left_out_too(made, found):
    samples = made.recording.traces.samples.copy()
    samples[int(10.0 * 2500) : int(11.0 * 2500)] += 5000.0 * np.sign(np.sin(np.arange(2500)))[:, None]
    spoilt = replace(made.recording, traces=InMemory(samples, 2500.0))
    profile, _ = profile_of("A", made.probe, [spoilt], settings=SETTINGS)
    assert any("because of artefacts" in text for text in profile.warnings)
    assert np.abs(profile.features["gamma_power_db"] - found[0].features["gamma_power_db"]).max() < 1.0


def test_a_fraction_reads_less_and_says_so(made, found):
    part, _ = profile_of("A", made.probe, [made.recording], settings=replace(SETTINGS, fraction=0.5))
    assert any("of 30 s" in text and "spread evenly" in text for text in part.warnings)
    assert np.abs(part.features["gamma_power_db"] - found[0].features["gamma_power_db"]).max() < 1.5


def test_several_shanks_and_gaps_keep_to_themselves(made):
    """The column's lower and upper part as two shanks, the upper one with a gap."""
    rows = np.arange(len(made.row_tip_um))
    lower, upper = rows[rows < 20], np.concatenate([rows[20:30], rows[38:]])
    contacts = np.concatenate([2 * lower, 2 * upper])
    probe = made.probe.take(contacts)
    probe = replace(probe, shank=np.repeat([0, 1], [len(lower), len(upper)]))
    profile, _ = profile_of("A", probe, [replace(made.recording, spikes=None)], settings=SETTINGS)
    assert profile.shank.tolist() == [0] * len(lower) + [1] * len(upper)
    csd = profile.features["evoked_csd_ua_per_mm3"]
    first, last = len(lower) + 9, len(lower) + 10
    assert np.isnan(csd[[0, len(lower) - 1, len(lower), first, last, -1]]).all()
    assert np.isfinite(csd[len(lower) + 1 : first]).all()


def test_recordings_of_other_levels_merge_without_a_step(made, found):
    """Two recordings of the same sites, the second asleep (6 dB more of everything) and with half of its sites dead."""
    samples = made.recording.traces.samples * 2.0
    samples[:, : samples.shape[1] // 2] = 0.0
    second = replace(made.recording, traces=InMemory(samples, 2500.0), spikes=None)
    profile, _ = profile_of("A", made.probe, [made.recording, second], settings=SETTINGS)
    assert set(profile.flags) == {""}
    for name in ("theta_power_db", "gamma_power_db", "theta_coherence"):
        assert np.abs(profile.features[name] - found[0].features[name]).max() < 0.3
    turn = np.exp(1j * (profile.features["theta_phase_rad"] - found[0].features["theta_phase_rad"]))
    assert np.abs(np.angle(turn)).max() < 0.3


def test_a_probe_wired_beyond_the_recording_is_refused():
    probe = line_probe(20)
    with pytest.raises(LeadlineError, match=r"wired to trace 19, the recording has 16 traces"):
        profile_of("A", probe, [Recording(InMemory(np.zeros((5000, 16)), 1000.0))], settings=SETTINGS)


def test_a_contact_that_was_not_recorded_makes_no_row():
    made = column(seed=7, seconds=4, per_row=1, events=0)
    channel = made.probe.channel.copy()
    channel[3] = -1
    probe = Probe(made.probe.contact_id, made.probe.x_um, made.probe.y_um, made.probe.shank, channel)
    profile, _ = profile_of("A", probe, [made.recording], settings=SETTINGS)
    assert made.row_tip_um[3] not in profile.tip_distance_um
    assert len(profile.tip_distance_um) == len(made.row_tip_um) - 1


def test_the_same_recording_gives_the_same_profile(made, found):
    again, _ = profile_of("A", made.probe, [made.recording], settings=SETTINGS)
    for name, values in found[0].features.items():
        assert np.array_equal(values, again.features[name], equal_nan=True)


def test_an_open_circuit_is_dead_from_end_to_end():
    made = column(seed=8, seconds=4)
    silent = replace(made.recording, traces=InMemory(np.full_like(made.recording.traces.samples, 7.0), 2500.0))
    profile, _ = profile_of("A", made.probe, [silent], settings=SETTINGS)
    assert set(profile.flags) == {"dead"}
    assert any("no channel holds a signal" in text for text in profile.warnings)
    assert np.isnan(profile.features["theta_power_db"]).all()
    assert np.isfinite(profile.features["spike_rate_hz"]).all()


@pytest.mark.parametrize("contacts", [1, 2, 3, 5])
def test_a_few_contacts_are_enough(contacts):
    rng = np.random.default_rng(9)
    traces = InMemory(rng.normal(0, 50, (4000, contacts)), 1000.0)
    events = Events(np.linspace(0.5, 3.5, 20), ("e",) * 20)
    profile, _ = profile_of("A", line_probe(contacts), [Recording(traces, None, events)], settings=SETTINGS)
    assert np.isfinite(profile.features["gamma_power_db"]).all()

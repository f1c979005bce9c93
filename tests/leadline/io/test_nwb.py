"""Recordings inside NWB files equal those in flat files and tables."""

import builtins
from dataclasses import replace

import h5py
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from tests.good_brain import N_CONTACTS, write_good_brain
from tests.made_nwb import ORDER, home_contact, write_nwb

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.io.nwb import open_nwb, read_nwb_events, read_nwb_excluded, read_nwb_spikes
from leadline.io.nwb_electrodes import need_pynwb
from leadline.io.probes import read_probe
from leadline.io.recordings import open_traces
from leadline.io.sources import left_out, open_recording, wired_to
from leadline.io.spikes import read_events, read_excluded, read_spikes
from leadline.model.brain import RecordingSource
from leadline.pipeline.bench import Bench


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("nwb")
    write_good_brain(folder)
    write_nwb(folder)
    return folder


@pytest.fixture(scope="module")
def probe(folder):
    return read_probe(folder / "probe_a.json", tip_offset_um=100.0)


@pytest.fixture(scope="module")
def flat(folder):
    return open_traces(read_brain(folder).penetrations[0].recordings[0])


@pytest.fixture(scope="module")
def traces(folder, probe):
    return open_nwb(folder / "session.nwb", probe, "A")


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.integers(0, 14900), st.integers(0, 400), st.lists(st.integers(0, 31), min_size=1, max_size=9))
def test_every_sample_is_the_flat_files_whatever_the_order_of_electrodes(traces, flat, start, length, channels):
    block = traces.read_uv(start, start + length, np.array(channels))
    assert block.dtype == np.float32
    assert np.array_equal(block, flat.read_uv(start, start + length, np.array(channels)))


def test_the_traces_know_their_length_and_rate(traces):
    assert (traces.n_samples, traces.n_channels, traces.sampling_hz) == (15000, N_CONTACTS, 2500.0)


def test_names_serve_where_there_are_no_places(tmp_path, flat):
    write_good_brain(tmp_path)
    path = write_nwb(tmp_path, places=False, names="contact_id", compress=True)
    found = open_nwb(path, read_probe(tmp_path / "probe_a.json"), "A")
    everything = np.arange(N_CONTACTS)
    assert np.array_equal(found.read_uv(0, 900, everything), flat.read_uv(0, 900, everything))


def test_long_chunks_are_unpacked_once_and_give_the_same_samples(tmp_path, flat, monkeypatch):
    write_good_brain(tmp_path)
    found = open_nwb(write_nwb(tmp_path, compress=True), read_probe(tmp_path / "probe_a.json"), "A")
    unpacked = []
    plain = h5py.Dataset.__getitem__
    monkeypatch.setattr(h5py.Dataset, "__getitem__", lambda d, key: (unpacked.append(key), plain(d, key))[1])
    channels = np.arange(N_CONTACTS)
    for start in range(0, 15000, 700):  # chunks of 5000 samples
        assert np.array_equal(found.read_uv(start, start + 600, channels), flat.read_uv(start, start + 600, channels))
    assert len(unpacked) == 3
    assert len(found.kept) <= 2
    assert found.read_uv(14990, 15100, channels).shape == (10, N_CONTACTS)
    assert found.read_uv(15100, 15200, channels).shape == (0, N_CONTACTS)


def test_contacts_without_an_electrode_count_as_not_recorded(tmp_path, flat):
    write_good_brain(tmp_path)
    path = write_nwb(tmp_path, order=ORDER[ORDER % 4 != 1])
    probe = read_probe(tmp_path / "probe_a.json")
    wired = wired_to(RecordingSource(lfp=path), probe, "A")
    kept = np.flatnonzero(np.arange(N_CONTACTS) % 4 != 1)
    assert wired.recorded.channel.tolist() == kept.tolist()
    found = open_nwb(path, wired.recorded, "A")
    assert np.array_equal(found.read_uv(0, 50, kept), flat.read_uv(0, 50, kept))
    with pytest.raises(LeadlineError, match="no trace of channel 1"):
        found.read_uv(0, 50, np.array([0, 1]))


def test_a_wired_probe_keeps_its_channel_numbers(folder, probe, flat):
    turned = replace(probe, channel=np.arange(N_CONTACTS)[::-1].copy())
    found = open_nwb(folder / "session.nwb", turned, "A")
    assert np.array_equal(found.read_uv(0, 50, np.array([0])), flat.read_uv(0, 50, np.array([31])))


def test_gains_of_their_own_and_offsets_are_honoured(tmp_path, probe):
    write_good_brain(tmp_path)
    path = write_nwb(tmp_path)
    gains = np.linspace(1.0, 2.0, N_CONTACTS)
    with h5py.File(path, "r+") as handle:
        series = handle["processing/ecephys/LFP/lfp"]
        plain = series["data"][:40].astype(float)
        series.create_dataset("channel_conversion", data=gains, dtype="f4").attrs["axis"] = 1
        series["data"].attrs["offset"] = 3e-6
    found = open_nwb(path, probe, "A").read_uv(0, 40, ORDER)
    assert np.allclose(found, plain * gains.astype("f4") * 0.5 + 3.0, rtol=1e-6, atol=1e-4)


def test_spikes_events_and_exclusions_equal_the_tables(folder, probe):
    wired = wired_to(RecordingSource(lfp=folder / "session.nwb"), probe, "A")
    spikes, table = read_nwb_spikes(folder / "session.nwb", wired, "A"), read_spikes(folder / "a_spikes.csv", wired)
    assert np.allclose(spikes.time_s, table.time_s)
    assert [int(n) for n in spikes.unit_names] == list(range(12))
    homes = np.array([home_contact(int(spikes.unit_names[u])) for u in spikes.unit_id])
    assert np.array_equal(spikes.tip_distance_um, 100.0 + 50.0 * homes)
    events, listed = read_nwb_events(folder / "session.nwb", "A"), read_events(folder / "a_events.csv")
    assert np.allclose(events.time_s, listed.time_s)
    assert events.kind == listed.kind
    assert np.allclose(read_nwb_excluded(folder / "session.nwb", "A"), read_excluded(folder / "a_exclude.csv"))


def test_times_count_from_the_first_sample_of_the_lfp(tmp_path, folder, probe):
    write_good_brain(tmp_path)
    late = write_nwb(tmp_path, start_s=100.0)
    wired = wired_to(RecordingSource(lfp=late), probe, "A")
    early = read_nwb_spikes(folder / "session.nwb", wired, "A")
    assert np.allclose(read_nwb_spikes(late, wired, "A").time_s, early.time_s)
    assert np.allclose(read_nwb_events(late, "A").time_s, read_nwb_events(folder / "session.nwb", "A").time_s)
    assert np.allclose(read_nwb_excluded(late, "A"), [[2.1, 2.4]])


def test_a_unit_sits_where_its_mean_waveform_is_largest(tmp_path, probe):
    from pynwb import NWBHDF5IO

    write_good_brain(tmp_path)
    path = write_nwb(tmp_path)
    with h5py.File(path, "r+") as handle:
        del handle["units"]
    with NWBHDF5IO(str(path), "r+") as io:
        nwb = io.read()
        wave = np.zeros((20, 3))
        wave[5] = [-10e-6, -80e-6, -30e-6]
        nwb.add_unit(spike_times=[1.0, 2.0], electrodes=[4, 9, 6], waveform_mean=wave)
        io.write(nwb)
    wired = wired_to(RecordingSource(lfp=path), probe, "A")
    spikes = read_nwb_spikes(path, wired, "A")
    assert spikes.tip_distance_um.tolist() == [100.0 + 50.0 * ORDER[9]] * 2
    assert spikes.amplitude_uv.tolist() == pytest.approx([80.0, 80.0])


def test_a_brain_with_everything_in_one_nwb_file_opens_as_with_flat_files(tmp_path):
    write_good_brain(tmp_path)
    write_nwb(tmp_path)
    toml = tmp_path / "brain.toml"
    start, stop = toml.read_text().index("  lfp ="), toml.read_text().index("[[anchor]]")
    session = "".join(f'  {key} = "session.nwb"\n' for key in ("lfp", "spikes", "events", "exclude"))
    toml.write_text(toml.read_text()[:start] + session + "\n" + toml.read_text()[stop:])
    bench = Bench(read_brain(tmp_path))
    (penetration,) = bench.brain.penetrations
    probe = bench.probe(penetration)
    (recording,) = bench.recordings(penetration, probe)
    assert probe.channel.tolist() == list(range(N_CONTACTS))
    assert recording.traces.n_samples == 15000
    assert len(recording.spikes.time_s) == 400
    assert len(recording.events.time_s) == 11
    assert left_out(penetration.recordings[0], probe, "A") == ""


@pytest.fixture(scope="module")
def two_series(tmp_path_factory):
    """A file with a morning and an evening series on one group, the evening's an hour later and half as large."""
    from pynwb import NWBHDF5IO
    from pynwb.ecephys import ElectricalSeries

    folder = tmp_path_factory.mktemp("two")
    write_good_brain(folder)
    path = write_nwb(folder, start_s=10.0)
    with NWBHDF5IO(str(path), "r+") as io:
        nwb = io.read()
        lfp = nwb.processing["ecephys"]["LFP"]
        first = lfp.electrical_series["lfp"]
        lfp.add_electrical_series(
            ElectricalSeries(
                name="evening", data=first.data[:5000], electrodes=first.electrodes, rate=first.rate,
                starting_time=3600.0, conversion=first.conversion / 2,
            )
        )  # fmt: skip
        io.write(nwb)
    with h5py.File(path, "r+") as handle:
        handle["units/spike_times"][-1] = 3600.5
    return path


def test_of_several_series_of_a_group_one_is_named(two_series, probe, flat):
    with pytest.raises(
        LeadlineError, match=r"2 of its electrical series fit 'A'.*Say which with lfp_series = .*evening"
    ):
        open_nwb(two_series, probe, "A")
    with pytest.raises(LeadlineError, match=r"no electrical series 'evning'; it holds 'evening', 'lfp'. Did you mean"):
        open_nwb(two_series, probe, "A", "evning")
    channels = np.arange(N_CONTACTS)
    evening, morning = (open_nwb(two_series, probe, "A", name) for name in ("evening", "lfp"))
    assert (evening.n_samples, morning.n_samples) == (5000, 15000)
    assert np.array_equal(morning.read_uv(0, 99, channels), flat.read_uv(0, 99, channels))
    assert np.array_equal(evening.read_uv(0, 99, channels), flat.read_uv(0, 99, channels) / 2)


def test_times_count_from_the_named_series_and_end_with_it(two_series, probe):
    wired = wired_to(RecordingSource(lfp=two_series, lfp_series="lfp"), probe, "A")
    morning, evening = (read_nwb_spikes(two_series, wired, "A", name) for name in ("lfp", "evening"))
    assert evening.time_s.tolist() == pytest.approx([0.5])
    assert evening.unit_names[evening.unit_id[0]] == "11"
    assert len(morning.time_s) == 399
    assert np.allclose(
        read_nwb_events(two_series, "A", "evening").time_s + 3590, read_nwb_events(two_series, "A", "lfp").time_s
    )


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (lambda f: f["general/extracellular_ephys"].pop("electrodes"), "cannot be read as NWB|no electrode table"),
        (lambda f: f["processing/ecephys"].pop("LFP"), "has no electrical series"),
        (
            lambda f: f["general/extracellular_ephys/electrodes/rel_y"].__setitem__(slice(None), 9.5),
            "no contact of the",
        ),
        (lambda f: f["general/extracellular_ephys/electrodes/group_name"].__setitem__(slice(None), "B"), None),
    ],
)
def test_what_cannot_be_read_is_told(tmp_path, probe, spoil, words):
    write_good_brain(tmp_path)
    path = write_nwb(tmp_path)
    with h5py.File(path, "r+") as handle:
        spoil(handle)
    if words is None:  # the only group is taken, whatever its name; the second group's places then fit twice
        words = "fits 2 electrodes"
    with pytest.raises(LeadlineError, match=words):
        open_nwb(path, probe, "A")


def test_a_group_of_another_name_is_told_with_those_there_are(folder, probe):
    with pytest.raises(LeadlineError, match="no electrode group 'B'; groups are 'A', 'other'"):
        open_nwb(folder / "session.nwb", probe, "B")


def test_a_file_that_is_no_nwb_is_told(tmp_path, probe):
    path = tmp_path / "x.nwb"
    path.write_bytes(b"not HDF5")
    with pytest.raises(LeadlineError, match="cannot be read as NWB"):
        open_nwb(path, probe, "A")


def test_without_pynwb_the_message_says_how_to_install_it(tmp_path, monkeypatch):
    monkeypatch.setattr("importlib.util.find_spec", lambda name: None)
    with pytest.raises(LeadlineError, match=r"pip install 'leadline\[nwb\]'"):
        need_pynwb(tmp_path / "x.nwb")


def test_opening_flat_files_never_imports_pynwb(folder, monkeypatch):
    plain = builtins.__import__

    def without_pynwb(name, *rest, **more):
        assert not name.startswith("pynwb")
        return plain(name, *rest, **more)

    monkeypatch.setattr(builtins, "__import__", without_pynwb)
    bench = Bench(read_brain(folder))
    (penetration,) = bench.brain.penetrations
    open_recording(penetration.recordings[0], bench.probe(penetration), "A", "first")

"""The script for SpikeInterface's environment, on an object that answers as its recordings and sortings do.

SpikeInterface itself cannot live in this environment (it needs an older zarr); where the variable
LEADLINE_SPIKEINTERFACE_PYTHON names a Python that has it, the last test runs the script there for real.
"""

import os
import subprocess
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import leadline.contrib.from_spikeinterface as script
from leadline.contrib.from_spikeinterface import write_recording_folder
from leadline.io.probes import read_probe, wire
from leadline.io.recordings import open_traces
from leadline.io.spikes import read_spikes
from leadline.io.units import read_unit_table
from leadline.model.brain import RecordingSource

PYTHON = os.environ.get("LEADLINE_SPIKEINTERFACE_PYTHON")
HZ = 1000.0


class Recording:
    """Eight channels on two shanks, 4 seconds."""

    channel_ids = np.array([f"ch{k}" for k in range(8)])

    def __init__(self, **changes):
        rng = np.random.default_rng(0)
        self.raw = rng.integers(-200, 200, (4000, 8)).astype("i2")
        for frame in Sorting().trains[7]:
            self.raw[frame, 5] -= 4000
        self.answers = {"has_probe": True, "has_scaleable_traces": True, "get_num_segments": 1} | changes

    def __getattr__(self, name):
        if name in self.__dict__.get("answers", {}):
            return lambda: self.answers[name]
        raise AttributeError(name)

    def get_sampling_frequency(self):
        return HZ

    def get_num_samples(self):
        return len(self.raw)

    def get_channel_locations(self):
        return np.column_stack([np.repeat([0.0, 250.0], 4), np.tile([0.0, 25, 50, 75], 2)])

    def get_channel_groups(self):
        return np.repeat([0, 1], 4)

    def get_traces(self, start_frame, end_frame, return_scaled):  # the keyword of older versions
        assert return_scaled
        return self.raw[start_frame:end_frame] * np.float32(0.25)


class Sorting:
    unit_ids = np.array([7, 3])

    def __init__(self, **more):
        self.trains = {7: np.array([100, 900, 3000]), 3: np.array([50, 1000, 2000, 3500])}
        self.properties = {"quality": np.array(["good", "mua"]), "template": np.zeros((2, 5))} | more

    def get_property(self, name):
        return self.properties.get(name)

    def get_property_keys(self):
        return list(self.properties)

    def get_unit_spike_train(self, unit):
        return self.trains[unit]

    def get_sampling_frequency(self):
        return HZ


def test_the_folder_is_read_back_by_leadline(tmp_path):
    sorting = Sorting(peak_channel_id=np.array(["ch6", "ch1"]))
    folder = write_recording_folder(Recording(), tmp_path / "rec", sorting=sorting, name="A")
    probe = read_probe(folder / "probe.json")
    assert probe.shanks == (0, 1)
    assert probe.channel.tolist() == list(range(8))
    traces = open_traces(RecordingSource(folder / "lfp.bin", HZ, 8, "float32", 1.0))
    assert np.array_equal(traces.read_uv(0, 4000, np.arange(8)), Recording().raw * np.float32(0.25))
    spikes = read_spikes(folder / "spikes.csv", wire(probe, 8))
    of_7 = spikes.unit_id == spikes.unit_names.index("7")
    assert spikes.time_s[of_7].tolist() == [0.1, 0.9, 3.0]
    assert set(spikes.tip_distance_um[of_7]) == {50.0}
    assert set(spikes.shank[of_7]) == {1}
    units = read_unit_table(folder / "units.csv")
    assert units[["unit_id", "quality"]].to_numpy().tolist() == [["7", "good"], ["3", "mua"]]
    assert "template" not in units


def test_its_lines_fit_into_a_brain_file(tmp_path):
    import tomllib

    folder = write_recording_folder(Recording(), tmp_path / "rec", sorting=Sorting(), name='B "x"')
    (penetration,) = tomllib.loads((folder / "penetration.toml").read_text())["penetration"]
    assert penetration["name"] == 'B "x"'
    assert penetration["unit_table"] == "rec/units.csv"
    (recording,) = penetration["recording"]
    assert recording == {
        "lfp": "rec/lfp.bin", "sampling_hz": 1000.0, "n_channels": 8, "dtype": "float32", "uv_per_bit": 1.0,
        "spikes": "rec/spikes.csv",
    }  # fmt: skip


def test_without_a_property_a_unit_is_put_where_it_is_largest(tmp_path):
    folder = write_recording_folder(Recording(), tmp_path / "rec", sorting=Sorting())
    table = pd.read_csv(folder / "spikes.csv")
    assert set(table.loc[table["unit_id"] == 7, "channel"]) == {5}


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"has_probe": False}, "has no probe"),
        ({"has_scaleable_traces": False}, "no gains to microvolts"),
        ({"get_num_segments": 2}, "several segments"),
    ],
)
def test_what_cannot_be_written_is_told_before_anything_is(tmp_path, changes, words):
    with pytest.raises(ValueError, match=words):
        write_recording_folder(Recording(**changes), tmp_path / "rec")
    assert not (tmp_path / "rec").exists()
    (tmp_path / "full").mkdir()
    (tmp_path / "full" / "x").touch()
    with pytest.raises(ValueError, match="holds files already"):
        write_recording_folder(Recording(), tmp_path / "full")


def test_the_script_needs_neither_leadline_nor_anything_but_numpy_to_be_imported():
    text = Path(script.__file__).read_text()
    imports = {line.split()[1].split(".")[0] for line in text.splitlines() if line.startswith(("import ", "from "))}
    assert imports == {"__future__", "argparse", "csv", "json", "pathlib", "typing", "numpy", "from_spikeinterface"} - {
        "from_spikeinterface"
    }


@pytest.mark.skipif(PYTHON is None, reason="LEADLINE_SPIKEINTERFACE_PYTHON names no Python with SpikeInterface")
def test_it_runs_in_spikeinterfaces_own_environment(tmp_path):
    make = (
        "from spikeinterface.core import generate_ground_truth_recording as g;"
        "r, s = g(durations=[4.0], num_channels=16, num_units=5, sampling_frequency=25000.0, seed=1);"
        f"r.save(folder={str(tmp_path / 'r')!r}); s.save(folder={str(tmp_path / 's')!r})"
    )
    subprocess.run([PYTHON, "-c", make], check=True, timeout=300)
    words = [PYTHON, script.__file__, str(tmp_path / "r"), str(tmp_path / "out"), "--sorting", str(tmp_path / "s")]
    subprocess.run(words, check=True, timeout=300)
    traces = open_traces(RecordingSource(tmp_path / "out" / "lfp.bin", 2500.0, 16, "float32", 1.0))
    assert traces.n_samples == 10000
    probe = wire(read_probe(tmp_path / "out" / "probe.json"), 16)
    assert len(read_spikes(tmp_path / "out" / "spikes.csv", probe).unit_names) == 5

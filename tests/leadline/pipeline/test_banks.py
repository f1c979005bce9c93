"""Two banks of one shank, recorded one after the other through site maps of their own, become one profile."""

import json

import numpy as np
import pytest
from tests.leadline.physiology.invented import InMemory, by_layer, column

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.io.profiles import read_profile, write_profile
from leadline.model.probe import Probe, united
from leadline.model.recording import Recording
from leadline.model.settings import ProfileSettings
from leadline.physiology import profile_of
from leadline.pipeline.bench import Bench

SETTINGS = ProfileSettings()
OVERLAP = 12  # rows of the column that both banks hold


@pytest.fixture(scope="module")
def made():
    return column(seed=21, seconds=20.0, per_row=1)


@pytest.fixture(scope="module")
def whole(made):
    return profile_of("A", made.probe, [Recording(made.recording.traces)], settings=SETTINGS)[0]


def banks_of(made, gain_of_upper=1.0, overlap=OVERLAP):
    """The column as two recordings: its lower and its upper rows, each wired from trace 0 on."""
    rows = np.arange(len(made.row_tip_um))
    half = len(rows) // 2
    lower, upper = rows[: half + overlap // 2], rows[half - overlap // 2 :]
    found = []
    for mine, gain in ((lower, 1.0), (upper, gain_of_upper)):
        probe = made.probe.take(mine)
        order = np.random.default_rng(len(mine)).permutation(len(mine))
        probe = Probe(probe.contact_id, probe.x_um, probe.y_um, probe.shank, order)
        samples = np.empty((made.recording.traces.n_samples, len(mine)), np.float32)
        samples[:, order] = gain * made.recording.traces.samples[:, mine]
        found.append(Recording(InMemory(samples, 2500.0), name=f"bank {len(found)}", probe=probe))
    return found


def union_of(recordings):
    return united([r.probe for r in recordings], [len(r.probe.channel) for r in recordings])


def test_two_banks_are_the_profile_of_the_whole_shank(made, whole):
    banks = banks_of(made, gain_of_upper=2.0)
    profile, spectra = profile_of("A", union_of(banks), banks, settings=SETTINGS)
    assert np.allclose(profile.tip_distance_um, whole.tip_distance_um)
    assert set(profile.flags) == {""}
    assert spectra.power_uv2_per_hz.shape[0] == len(whole.tip_distance_um)
    for name in ("theta_power_db", "gamma_power_db", "ripple_power_db"):
        assert np.abs(profile.features[name] - whole.features[name]).max() < 0.5, name
    turn = np.angle(np.exp(1j * (profile.features["theta_phase_rad"] - whole.features["theta_phase_rad"])))
    assert np.ptp(turn) < 0.5
    level = by_layer(profile.features["ripple_power_db"], made)
    assert max(level, key=level.get) == "pyramidal"
    assert not any("in common" in text for text in profile.warnings)


def test_shared_rows_weigh_by_seconds(made):
    """A bank of twice the length counts twice where both saw a row."""
    short, long = banks_of(made)
    short = Recording(InMemory(short.traces.samples[: 10 * 2500], 2500.0), probe=short.probe)
    alone = [profile_of("A", r.probe, [r], settings=SETTINGS)[0] for r in (short, long)]
    both = profile_of("A", union_of([short, long]), [short, long], settings=SETTINGS)[0]
    name = "neighbour_coherence"
    first = slice(len(short.probe.channel) - OVERLAP + 2, len(short.probe.channel) - 2)
    a, b = alone[0].features[name][first], alone[1].features[name][2 : OVERLAP - 2]
    known = np.isfinite(a) & np.isfinite(b)
    assert known.sum() >= 6
    assert both.features[name][first][known] == pytest.approx(((a + 2 * b) / 3)[known], rel=0.02)


def test_banks_without_common_rows_say_so_and_keep_their_own_clocks_apart(made, whole):
    banks = banks_of(made, overlap=0)
    profile, _ = profile_of("A", union_of(banks), banks, settings=SETTINGS)
    assert any("fewer than 8 rows in common" in text for text in profile.warnings)
    assert np.isfinite(profile.features["theta_power_db"]).all()
    known = np.isfinite(profile.features["theta_phase_rad"])
    assert known[: len(banks[0].probe.channel)].all()
    assert not known[len(banks[0].probe.channel) :].any()


def test_a_row_that_one_bank_finds_dead_and_the_other_never_saw_is_dead(made):
    banks = banks_of(made)
    banks[0].traces.samples[:, banks[0].probe.channel[3]] = 0.0
    profile, _ = profile_of("A", union_of(banks), banks, settings=SETTINGS)
    assert [k for k, flag in enumerate(profile.flags) if flag] == [3]


def test_channels_count_on_and_each_place_is_one_contact():
    def bank(ids, y, channel):
        n = len(ids)
        return Probe(ids, np.zeros(n), np.array(y, float), np.zeros(n, int), np.array(channel), 100.0)

    both = united([bank(("a", "b", "c"), [0, 20, 40], [1, 0, -1]), bank(("b", "a"), [20, 60], [1, 0])], [5, 4])
    assert both.contact_id == ("a", "b", "2:a")
    assert both.y_um.tolist() == [0, 20, 60]
    assert both.channel.tolist() == [1, 0, 5]
    assert both.tip_distance_um.tolist() == [100, 120, 160]


def probe_file(path, y_um, channels=None, shanks=None):
    n = len(y_um)
    probe = {
        "ndim": 2, "si_units": "um", "annotations": {"model_name": "invented", "manufacturer": "nobody"},
        "contact_positions": [[0.0, float(y)] for y in y_um], "contact_shapes": ["circle"] * n,
        "contact_shape_params": [{"radius": 5.0}] * n, "contact_ids": [f"e{round(y)}" for y in y_um],
    }  # fmt: skip
    if channels is not None:
        probe["device_channel_indices"] = list(channels)
    if shanks is not None:
        probe["shank_ids"] = list(shanks)
    path.write_text(json.dumps({"specification": "probeinterface", "version": "0.3.0", "probes": [probe]}))
    return path


def brain_of(folder, recordings, probe_keys=""):
    (folder / "atlas").mkdir(exist_ok=True)
    (folder / "stack.tif").write_bytes(b"")
    text = f"""format = 1
[brain]
name = "banks"
[atlas]
path = "atlas"
[stack]
background = "stack.tif"
[[penetration]]
name = "A"
probe = "all.json"
tip_offset_um = 100.0
{probe_keys}"""
    for keys in recordings:
        text += "[[penetration.recording]]\n" + keys + "\n"
    (folder / "brain.toml").write_text(text)
    return read_brain(folder / "brain.toml")


def flat(folder, name, n_channels):
    np.random.default_rng(n_channels).integers(-50, 50, (2000, n_channels)).astype("<i2").tofile(folder / name)
    return f'lfp = "{name}"\nsampling_hz = 1000.0\nn_channels = {n_channels}\ndtype = "int16"\nuv_per_bit = 1.0\n'


def test_a_brain_of_two_banks_is_opened_through_their_site_maps(tmp_path):
    probe_file(tmp_path / "all.json", np.arange(12) * 20.0, [-1] * 12, ["left"] * 6 + ["right"] * 6)
    probe_file(tmp_path / "low.json", np.arange(4) * 20.0, [3, 2, 1, 0], ["left"] * 4)
    probe_file(tmp_path / "high.json", np.arange(6, 9) * 20.0, [0, 1, 2], ["right"] * 3)
    low = flat(tmp_path, "low.bin", 5) + 'probe = "low.json"'
    high = flat(tmp_path, "high.bin", 3) + 'probe = "high.json"\nspikes = "high.csv"'
    (tmp_path / "high.csv").write_text("time_s,unit_id,channel\n0.5,u,1\n")
    brain = brain_of(tmp_path, [low, high])
    bench, penetration = Bench(brain), brain.penetrations[0]
    probe = bench.probe(penetration)
    assert probe.channel.tolist() == [3, 2, 1, 0, 5, 6, 7]
    assert probe.shank.tolist() == [0] * 4 + [1] * 3
    first, second = bench.recordings(penetration, probe)
    assert first.probe.contact_id == ("e0", "e20", "e40", "e60")
    assert second.spikes.tip_distance_um.tolist() == [240.0]
    assert second.spikes.shank.tolist() == [1]


def test_a_probe_file_that_connects_nothing_is_refused_unless_recordings_bring_their_own(tmp_path):
    probe_file(tmp_path / "all.json", np.arange(4) * 20.0, [-1] * 4)
    brain = brain_of(tmp_path, [flat(tmp_path, "low.bin", 4)])
    with pytest.raises(LeadlineError, match=r"no contact is connected: device_channel_indices is -1 throughout"):
        Bench(brain).probe(brain.penetrations[0])


def test_how_much_was_read_is_kept_with_the_profile(made, whole, tmp_path):
    ((read_s, of_s),) = whole.read_s
    assert of_s == pytest.approx(20.0)
    assert read_s == pytest.approx(20.0, abs=2.1)
    write_profile(tmp_path / "A.parquet", whole)
    assert read_profile(tmp_path / "A.parquet").read_s == whole.read_s

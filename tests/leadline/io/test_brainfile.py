"""brain.toml: what is read, and what is said when it is wrong."""

import pytest

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain

GOOD = """
format = 1
[brain]
name = "kestrel-07"
[atlas]
path = "atlas"
[stack]
background = "auto.nrrd"
dye = "dye.nrrd"
voxel_um = [8.0, 4, 4]
orientation = "pir"
[[penetration]]
name = "A"
probe = "probe.json"
tip_offset_um = 175.0
entry_near_um = [7900, 300, 8100]
shank_toward = "p"
  [[penetration.recording]]
  lfp = "a.bin"
  sampling_hz = 2500.0
  n_channels = 385
  dtype = "int16"
  uv_per_bit = 4.69
  skip_channels = [384]
[[anchor]]
penetration = "A"
tip_distance_um = 2380.0
track_depth_um = 1420
note = "ripple peak"
[settings.profile]
ripple_hz = [100.0, 250.0]
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "atlas").mkdir()
    for name in ("auto.nrrd", "dye.nrrd", "probe.json", "a.bin"):
        (tmp_path / name).write_bytes(b"x")
    return tmp_path


def read(folder, text):
    (folder / "brain.toml").write_text(text)
    return read_brain(folder)


def test_everything_that_was_written_is_read(folder):
    brain = read(folder, GOOD)
    a = brain.penetrations[0]
    assert (brain.name, brain.stack.code, brain.stack.voxel_um) == ("kestrel-07", "PIR", (8.0, 4.0, 4.0))
    assert (a.tip_offset_um, a.entry_near_um, a.shank_toward) == (175.0, (7900.0, 300.0, 8100.0), "P")
    assert a.recordings[0].skip_channels == (384,)
    assert a.recordings[0].lfp == folder / "a.bin"
    assert (brain.anchors[0].track_depth_um, brain.anchors[0].sd_um) == (1420.0, 40.0)
    assert brain.settings.profile.ripple_hz == (100.0, 250.0)
    assert brain.settings.profile.theta_hz == (4.0, 12.0)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("shank_toward", "shank_towards", "unknown key 'shank_towards'. Did you mean 'shank_toward'"),
        ('name = "A"', 'name = "../A"', "cannot be a name"),
        ('name = "A"\nprobe', "probe", "'name' is missing"),
        ("[8.0, 4, 4]", "[8.0, 4]", "voxel_um = \\[8.0, 4\\] is not three sizes"),
        ("[8.0, 4, 4]", "[8.0, 4, 0]", "is not three sizes"),
        ('"pir"', '"pix"', "orientation 'pix' is not a three-letter code"),
        ("2500.0", '"fast"', "sampling_hz = 'fast' is not samples a second"),
        ('dtype = "int16"', 'dtype = "int24"', "dtype = 'int24' is not"),
        ("  uv_per_bit = 4.69\n", "", "'uv_per_bit' is missing"),
        ("  sampling_hz = 2500.0\n", "", "'sampling_hz' is missing"),
        ('"a.bin"', '"b.bin"', "b.bin does not exist. Paths are relative to brain.toml. Did you mean 'a.bin'"),
        ('penetration = "A"\ntip', 'penetration = "B"\ntip', "there is no penetration 'B'"),
        ("track_depth_um = 1420", "track_depth_um = nan", "track_depth_um = nan is not a number of um"),
        ("ripple_hz = [100.0, 250.0]", "ripple_hz = [250.0, 100.0]", "two increasing numbers"),
        ('dtype = "int16"', 'dtype = "int16"\nlfp_series = "x"', "'lfp_series' names a series inside an NWB file"),
        ("ripple_hz", "riple_hz", "Did you mean 'ripple_hz'"),
        ("format = 1", "format = 2", "format = 2 is not known"),
        ("[brain]", "[brian]", "unknown key 'brian'. Did you mean 'brain'"),
        ('background = "auto.nrrd"\n', "", "'background' is missing"),
        ("[[penetration]]", "[penetration]", "Write \\[\\[penetration\\]\\]"),
        ('shank_toward = "p"', 'shank_toward = "up"', "shank_toward = 'up' is not one of"),
        ("format = 1", "format = ", "is not valid TOML"),
        ('  lfp = "a.bin"\n', "", "names neither lfp nor spikes"),
    ],
)
def test_a_wrong_line_is_named_with_its_mend(folder, old, new, words):
    assert old in GOOD
    with pytest.raises(LeadlineError, match=words):
        read(folder, GOOD.replace(old, new, 1))


def test_all_faults_are_told_at_once(folder):
    text = GOOD.replace('"pir"', '"pix"').replace('"int16"', '"int24"').replace("note =", "nota =")
    with pytest.raises(LeadlineError) as caught:
        read(folder, text)
    message = str(caught.value)
    assert all(word in message for word in ("pix", "int24", "nota"))


def test_two_penetrations_of_one_name_are_refused(folder):
    with pytest.raises(LeadlineError, match="two penetrations are named 'a'"):
        read(folder, GOOD.replace("[[anchor]]", '[[penetration]]\nname = "a"\nprobe = "probe.json"\n[[anchor]]', 1))


def test_a_missing_brain_file_says_what_to_name(tmp_path):
    with pytest.raises(LeadlineError, match=r"no such file\. Name a brain\.toml"):
        read_brain(tmp_path)

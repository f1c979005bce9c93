import copy
import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.io.probes import in_words, is_wired, read_probe, unreferenced, wire
from leadline.model.probe import Probe

ONE = {
    "ndim": 2,
    "si_units": "um",
    "annotations": {"model_name": "invented"},
    "contact_positions": [[0.0, 0.0], [30.0, 20.0], [0.0, 40.0], [250.0, 0.0]],
    "contact_plane_axes": [[[1.0, 0.0], [0.0, 1.0]]] * 4,
    "contact_ids": ["e0", "e1", "e2", "e3"],
    "shank_ids": ["b", "b", "b", "a"],
    "device_channel_indices": [3, -1, 0, 7],
}


def written(tmp_path, *probes, **head):
    content = {"specification": "probeinterface", "version": "0.3.2", "probes": list(probes)} | head
    path = tmp_path / "probe.json"
    path.write_text(json.dumps(content))
    return path


def without(*keys, **changes):
    probe = {key: value for key, value in copy.deepcopy(ONE).items() if key not in keys}
    return probe | changes


def test_a_probe_is_read_as_it_stands(tmp_path):
    probe = read_probe(written(tmp_path, ONE), tip_offset_um=175.0)
    assert probe.contact_id == ("e0", "e1", "e2", "e3")
    assert probe.x_um.tolist() == [0, 30, 0, 250]
    assert probe.tip_distance_um.tolist() == [175, 195, 215, 175]
    assert probe.shank.tolist() == [0, 0, 0, 1]
    assert probe.channel.tolist() == [3, -1, 0, 7]
    assert is_wired(probe)


def test_millimetres_become_micrometres(tmp_path):
    positions = (np.array(ONE["contact_positions"]) / 1000).tolist()
    probe = read_probe(written(tmp_path, without(si_units="mm", contact_positions=positions)))
    assert probe.y_um == pytest.approx([0, 20, 40, 0])


def test_contacts_in_space_are_read_in_their_plane(tmp_path):
    c, s = np.cos(0.3), np.sin(0.3)
    axes = np.array([[c, s, 0.0], [0.0, 0.0, 1.0]])
    space = np.array(ONE["contact_positions"]) @ axes
    probe = without(contact_positions=space.tolist(), contact_plane_axes=[axes.tolist()] * 4, ndim=3)
    read = read_probe(written(tmp_path, probe))
    assert read.x_um == pytest.approx([0, 30, 0, 250])
    assert read.y_um == pytest.approx([0, 20, 40, 0])


def test_names_shanks_and_wiring_may_be_absent(tmp_path):
    read = read_probe(written(tmp_path, without("contact_ids", "shank_ids", "device_channel_indices")))
    assert read.contact_id == ("0", "1", "2", "3")
    assert read.shanks == (0,)
    assert not is_wired(read)


def test_one_probe_of_several_is_chosen_by_number(tmp_path):
    other = without(contact_positions=[[0, 5], [0, 6], [0, 7], [0, 8]])
    path = written(tmp_path, ONE, other)
    assert read_probe(path, probe_index=1).y_um.tolist() == [5, 6, 7, 8]
    with pytest.raises(LeadlineError, match=r"holds 2 probes \(0: invented, 4 contacts; 1: .*probe_index"):
        read_probe(path)
    with pytest.raises(LeadlineError, match="has no probe 2"):
        read_probe(path, probe_index=2)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"contact_positions": [[0, 0], [0, float("nan")], [0, 2], [0, 3]]}, "contact 1 has no finite position"),
        ({"contact_positions": [[0, 0], [0, 1], [0, 0], [0, 3]]}, "'e0' and 'e2' share the place"),
        ({"contact_positions": [[0, 0], [1]]}, "not rows of numbers"),
        ({"contact_positions": []}, "shape"),
        ({"contact_positions": [[0, 0], [0, 1], [0, 2], [0, 900_000]]}, "contacts span 900 mm. Correct si_units"),
        ({"contact_ids": ["a", "b", "c", "a"]}, "contacts 0 and 3 are both named 'a'"),
        ({"contact_ids": ["a"]}, "contact_ids has 1 entries for 4 contacts"),
        ({"shank_ids": ["a"] * 5}, "shank_ids has 5 entries"),
        ({"si_units": "inch"}, "si_units is 'inch'"),
        ({"device_channel_indices": [0, 1, 2, 2.5]}, "device_channel_indices hold 2.5"),
        ({"device_channel_indices": [0, 1, 2, -2]}, "hold -2"),
        ({"device_channel_indices": [0, 1, 2, 2]}, "trace 2 is wired to two contacts"),
        ({"contact_positions": [[0, 0, 0], [0, 0, 1], [0, 0, 2], [0, 0, 3]]}, "need contact_plane_axes"),
    ],
)
def test_faults_of_a_probe_are_named(tmp_path, change, words):
    with pytest.raises(LeadlineError, match=words) as caught:
        read_probe(written(tmp_path, without(**change)))
    assert caught.value.mend


def test_what_is_no_probe_file_is_refused(tmp_path):
    for text, words in (
        ("{", "no valid JSON"),
        ("[]", "no probeinterface file"),
        ('{"a": 1}', "no probeinterface file"),
    ):
        (tmp_path / "a.json").write_text(text)
        with pytest.raises(LeadlineError, match=words):
            read_probe(tmp_path / "a.json")
    with pytest.raises(LeadlineError, match="holds no probes"):
        read_probe(written(tmp_path))
    with pytest.raises(LeadlineError, match="is not there"):
        read_probe(tmp_path / "gone.json")


def bare(n, channel=None):
    return Probe(tuple(map(str, range(n))), np.zeros(n), np.arange(n) * 20.0, np.zeros(n, int),
                 np.full(n, -1) if channel is None else channel)  # fmt: skip


def below_tip():
    """A probe whose y grows down the shank."""
    return Probe(tuple("0123"), np.zeros(4), np.arange(4) * -20.0, np.zeros(4, int), np.full(4, -1))


@settings(deadline=None)
@given(st.integers(1, 60), st.sets(st.integers(0, 70), max_size=8))
def test_an_unwired_probe_takes_the_traces_that_are_not_skipped_in_order(n, skip):
    total = n + len(skip)
    skip = {k for k in skip if k < total}
    if total - len(skip) != n:
        return
    channel = wire(bare(n), total, sorted(skip)).channel
    assert channel.tolist() == [k for k in range(total) if k not in skip]


def test_a_wired_probe_keeps_its_wiring_and_leaves_traces_out():
    probe = bare(4, np.array([5, -1, 0, 2]))
    assert wire(probe, 9, [8]).channel.tolist() == [5, -1, 0, 2]
    assert unreferenced(probe, 9, [8]).tolist() == [1, 3, 4, 6, 7]
    assert in_words(np.array([1, 3, 4, 6, 7])) == "1, 3 to 4, 6 to 7"


@pytest.mark.parametrize(
    ("probe", "n", "skip", "words"),
    [
        (bare(384), 385, [], r"385 traces, the probe has 384 contacts .*Name the 1 that is no contact in skip_channels"
         r", e.g. skip_channels = \[384\]"),
        (bare(384), 384, [383], "384 traces less 1 in skip_channels, the probe has 384 contacts"),
        (bare(10), 8, [], "8 traces, the probe has 10 contacts"),
        (below_tip(), 4, [], r"contact '3' would lie 60 um beyond the tip \(y = -60 um, tip_offset_um = 0\)"),
        (bare(4), 5, [5], "skip_channels names trace 5, the recording has traces 0 to 4"),
        (bare(3, np.array([0, 1, 9])), 9, [], "contact '2' is wired to trace 9, the recording has 9 traces"),
        (bare(3, np.array([0, 1, 2])), 9, [2], "trace 2 is in skip_channels and is wired to a contact"),
    ],
)  # fmt: skip
def test_wiring_that_does_not_agree_is_refused(probe, n, skip, words):
    with pytest.raises(LeadlineError, match=words) as caught:
        wire(probe, n, skip)
    assert caught.value.mend

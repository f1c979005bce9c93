"""Probe files against probeinterface, the library that owns the format."""

import numpy as np
import pytest

from leadline.io.probes import read_probe, wire

probeinterface = pytest.importorskip("probeinterface")


def staggered():
    """384 of 960 sites of an invented high-density shank, switched in as three separate banks."""
    site = np.arange(960)
    row = site // 2
    x = np.where(row % 2 == 0, np.where(site % 2 == 0, 43, 59), np.where(site % 2 == 0, 11, 27))
    probe = probeinterface.Probe(ndim=2, si_units="um")
    on = np.r_[0:128, 300:428, 700:828]
    probe.set_contacts(np.column_stack([x, row * 20.0])[on], shapes="square", shape_params={"width": 12})
    probe.set_contact_ids([f"e{k}" for k in on])
    return probe


def shanks():
    group = probeinterface.generate_multi_shank(num_shank=4, num_columns=2, num_contact_per_column=8)
    group.set_device_channel_indices(np.random.default_rng(0).permutation(len(group.contact_positions)))
    return group


@pytest.mark.parametrize("make", [staggered, shanks, lambda: probeinterface.generate_linear_probe(32)])
def test_a_probe_comes_back_as_probeinterface_wrote_it(tmp_path, make):
    theirs = make()
    probeinterface.write_probeinterface(tmp_path / "a.json", theirs)
    again = probeinterface.read_probeinterface(tmp_path / "a.json").probes[0]
    ours = read_probe(tmp_path / "a.json")
    np.testing.assert_allclose(np.column_stack([ours.x_um, ours.y_um]), again.contact_positions)
    if again.contact_ids is not None:
        assert list(ours.contact_id) == list(again.contact_ids)
    if again.device_channel_indices is not None:
        assert ours.channel.tolist() == again.device_channel_indices.tolist()
    if again.shank_ids is not None:
        names = list(dict.fromkeys(again.shank_ids))
        assert [names[k] for k in ours.shank] == list(again.shank_ids)


def test_a_probe_in_space_keeps_its_plane(tmp_path):
    flat = probeinterface.generate_multi_columns_probe(num_columns=2, num_contact_per_column=6)
    space = flat.to_3d(axes="xz")
    probeinterface.write_probeinterface(tmp_path / "a.json", space)
    ours = read_probe(tmp_path / "a.json")
    np.testing.assert_allclose(np.column_stack([ours.x_um, ours.y_um]), flat.contact_positions, atol=1e-9)


def test_a_probe_in_millimetres(tmp_path):
    flat = probeinterface.Probe(ndim=2, si_units="mm")
    flat.set_contacts(np.column_stack([np.zeros(5), np.arange(5) * 0.025]))
    probeinterface.write_probeinterface(tmp_path / "a.json", flat)
    assert read_probe(tmp_path / "a.json").y_um == pytest.approx(np.arange(5) * 25.0)


def test_several_probes_of_a_group_are_told_apart(tmp_path):
    group = probeinterface.ProbeGroup()
    for n in (8, 16):
        group.add_probe(probeinterface.generate_linear_probe(n))
    group.set_global_device_channel_indices(np.arange(24))
    probeinterface.write_probeinterface(tmp_path / "a.json", group)
    second = read_probe(tmp_path / "a.json", probe_index=1)
    assert second.channel.tolist() == list(range(8, 24))
    assert wire(second, 24).channel.tolist() == list(range(8, 24))

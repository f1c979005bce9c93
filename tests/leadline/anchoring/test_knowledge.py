"""What is known of structure types, and which structures they recognise."""

import pytest

from leadline.anchoring import knowledge
from leadline.base.errors import LeadlineError
from leadline.model.atlas import Structure, Structures

TREE = Structures(
    (
        Structure(1, "root", "root", None),
        Structure(2, "CX", "Cerebral cortex", 1),
        Structure(3, "P4", "Area P, layer 4", 2, layer="4"),
        Structure(4, "P6b", "Area P, layer 6b", 2, layer="6b"),
        Structure(5, "HP", "Hippocampal region", 1),
        Structure(6, "CA1sp", "Field CA1, pyramidal layer", 5, layer="sp"),
        Structure(7, "DG", "Dentate gyrus", 5),
        Structure(8, "DG-sg", "Dentate gyrus, granule cell layer", 7, layer="sg"),
        Structure(9, "fx", "a sheet of fibres", 1, tissue="white"),
        Structure(10, "V3", "third ventricle", 1, tissue="ventricle"),
        Structure(11, "TH", "Thalamus", 1),
        Structure(12, "Tq", "nucleus q", 11),
        Structure(13, "HY", "Hypothalamus", 1),
        Structure(14, "odd", "a body without relations", 1),
        Structure(15, "CB", "Cerebellum", 1),
        Structure(16, "CBm", "molecular layer of the cerebellar lobule", 15),
    )
)


@pytest.mark.parametrize(
    ("structure_id", "name"),
    [
        (0, "outside"),
        (3, "cortex_layer_4"),
        (4, "cortex_layer_6"),
        (6, "ca_pyramidal"),
        (8, "dg_granule"),
        (7, "hippocampus"),
        (9, "white_matter"),
        (10, "ventricle"),
        (12, "thalamus"),
        (13, "hypothalamus"),
        (2, "cortex"),
        (16, "cerebellum"),
    ],
)
def test_types_are_recognised_by_tissue_layer_name_and_ancestry(structure_id, name):
    found = knowledge.builtin().of(TREE, structure_id)
    assert found is not None
    assert found.name == name


def test_structures_without_relations_have_no_type():
    assert knowledge.builtin().of(TREE, 14) is None
    assert knowledge.builtin().of(TREE, 999) is None


def test_every_built_in_type_states_its_source_and_weak_numbers():
    for kind in knowledge.builtin().types:
        assert kind.source, kind.name
        assert kind.rules, kind.name
        assert all(abs(v) <= 2 for v in kind.mean.values()), kind.name
        assert 0.1 <= kind.instance_sd <= kind.sd <= 0.9, kind.name


def test_a_lab_replaces_a_known_type_and_adds_its_own_before_the_others():
    text = """
format = 1
[depth]
scale_sd = 0.03
[[type]]
name = "white_matter"
mean = {unit_density_per_100um = -1.9}
[[type]]
name = "nucleus_q"
name_has = ["nucleus q"]
sd = 0.3
mean = {spike_rate_hz = 1.2}
"""
    ours = knowledge.parse(text, "lab.toml")
    assert ours.of(TREE, 12).name == "nucleus_q"
    white = ours.of(TREE, 9)
    assert dict(white.mean) == {"unit_density_per_100um": -1.9}
    assert white.rules == {"tissue": ("white",)}
    assert ours.depth.scale_sd == 0.03
    assert ours.depth.slope_sd == knowledge.builtin().depth.slope_sd
    assert knowledge.builtin().of(TREE, 12).name == "thalamus"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("format = 1\n[[type", "is no TOML"),
        ("format = 2", "format is 2"),
        ("format = 1\n[dept]", "'dept' is no known key.*depth"),
        ("format = 1\n[depth]\nscale = 0.1", "'scale' is no known key.*scale_sd"),
        ("format = 1\n[depth]\nscale_sd = -0.1", "scale_sd is -0.1"),
        ("format = 1\n[depth]\nscale_sd = nan", "nan is no number"),
        ("format = 1\n[depth]\nstray_share = 1.0", "stray_share is 1"),
        ("format = 1\ntype = 3", "type is no list"),
        ("format = 1\n[[type]]\nwords = 'x'", "type 1: has no name"),
        ("format = 1\n[[type]]\nname = 'new'", "has no rule"),
        ("format = 1\n[[type]]\nname = 'new'\nunder = ['x']\nsd = 0", "must be positive"),
        ("format = 1\n[[type]]\nname = 'cortex'\nmean = {gamma_powr_db = 1}", "'gamma_powr_db'.*gamma_power_db"),
        ("format = 1\n[[type]]\nname = 'cortex'\nmean = {gamma_power_db = 'high'}", "'high' is no number"),
    ],
)
def test_wrong_text_is_refused_with_the_key_and_the_place(text, message):
    with pytest.raises(LeadlineError, match=f"(?s)lab.toml.*{message}"):
        knowledge.parse(text, "lab.toml")

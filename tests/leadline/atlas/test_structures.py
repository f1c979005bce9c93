import pytest

from leadline.atlas.structures import derive
from leadline.model.atlas import Structure

# An invented tree with the ways in which structures are usually named.
TREE = (
    (1, "root", "root", None),
    (2, "GM", "Basic cell groups and regions", 1),
    (3, "CTX", "Cerebral cortex", 2),
    (4, "FT", "fiber tracts", 1),
    (5, "VS", "ventricular systems", 1),
    (6, "HPF", "Hippocampal formation", 3),
    (7, "CA", "Ammon's horn", 6),
    (8, "CA1", "Field CA1", 7),
    (9, "DG", "Dentate gyrus", 6),
    (10, "RHP", "Retrohippocampal region", 6),
    (11, "ENT", "Entorhinal area", 10),
    (12, "SUB", "Subiculum", 10),
    (13, "TH", "Thalamus", 2),
    (14, "HY", "Hypothalamus", 2),
    (15, "SC", "Superior colliculus", 2),
    (16, "CB", "Cerebellum", 2),
    (17, "OB", "Main olfactory bulb", 3),
    (18, "PIR", "Piriform area", 3),
    (19, "VIS", "Primary visual area", 3),
    (20, "CBT", "cerebellum related fiber tracts", 4),
    (21, "VL", "lateral ventricle", 5),
)
ROWS = tuple(Structure(*row) for row in TREE)


def derived(name, parent, acronym="X"):
    row = Structure(100, acronym, name, parent)
    return derive((*ROWS, row))[-1]


@pytest.mark.parametrize(
    ("name", "parent", "layer"),
    [
        ("Primary visual area, layer 1", 19, "1"),
        ("Primary visual area, layer 2/3", 19, "2/3"),
        ("Primary visual area, Layers 2-3", 19, "2/3"),
        ("Primary visual area, layer II/III", 19, "2/3"),
        ("Primary visual area, layer IV", 19, "4"),
        ("Primary visual area, layer VIa", 19, "6a"),
        ("Primary visual area, layer 6b", 19, "6b"),
        ("Primary visual area, layer 5b", 19, "5b"),
        ("Primary visual cortex L4", 19, "4"),
        ("Piriform area, layer 2", 18, "2"),
        ("Entorhinal area, lateral part, layer 2/3", 11, "2/3"),
        ("Primary visual area, layers 1-6", 19, ""),
        ("Primary visual area, layers 1 and 2", 19, ""),
        ("Primary visual area, layer in front", 19, ""),
        ("Field CA1, stratum oriens", 8, "so"),
        ("Field CA1, pyramidal layer", 8, "sp"),
        ("Field CA1, stratum radiatum", 8, "sr"),
        ("Field CA1, stratum lacunosum-moleculare", 8, "slm"),
        ("Field CA3, stratum lucidum", 7, "slu"),
        ("Dentate gyrus, molecular layer", 9, "mo"),
        ("Dentate gyrus, granule cell layer", 9, "sg"),
        ("Dentate gyrus, polymorph layer", 9, "po"),
        ("Dentate gyrus, hilus", 9, "po"),
        ("Dentate gyrus, granule cell and molecular layers", 9, ""),
        ("Subiculum, dorsal part, pyramidal layer", 12, "sp"),
        ("Field CA2", 7, ""),
        ("Superior colliculus, layer 1", 15, ""),
        ("Cerebellar cortex, molecular layer", 16, ""),
        ("Cerebellar cortex, granular layer", 16, ""),
        ("Main olfactory bulb, layer 3", 17, ""),
        ("Dentate nucleus, molecular part", 16, ""),
        ("Ventral posteromedial nucleus, layer 4 of nothing", 13, ""),
        ("Secondary visual area 1", 19, ""),
    ],
)
def test_layers_are_read_from_names_in_cortex_and_hippocampus_only(name, parent, layer):
    assert derived(name, parent).layer == layer


@pytest.mark.parametrize(
    ("name", "parent", "tissue"),
    [
        ("corpus callosum, body", 1, "white"),
        ("internal capsule", 2, "white"),
        ("anterior commissure, olfactory limb", 1, "white"),
        ("alveus", 6, "white"),
        ("fimbria", 6, "white"),
        ("Cerebral white matter", 3, "white"),
        ("dorsal spinocerebellar tract", 1, "white"),
        ("Tractus opticus", 1, "white"),
        ("arbor vitae", 16, "white"),
        ("cerebral peduncle", 1, "white"),
        ("genu", 4, "white"),
        ("ventral limb", 20, "white"),
        ("pyramid", 1, "white"),
        ("cerebral nuclei related", 4, "white"),
        ("ansa peduncularis", 1, "white"),
        ("tectospinal pathway", 2, "white"),
        ("supra-callosal cerebral white matter", 2, "white"),
        ("Subcommissural organ", 2, "grey"),
        ("Subfornical organ", 2, "grey"),
        ("Interpeduncular nucleus", 2, "grey"),
        ("Nucleus of the posterior commissure", 2, "grey"),
        ("Pyramus (VIII)", 16, "grey"),
        ("Field CA1, pyramidal layer", 8, "grey"),
        ("Nucleus of the optic tract", 2, "grey"),
        ("Nucleus tractus solitarii", 2, "grey"),
        ("Bed nuclei of the stria terminalis", 2, "grey"),
        ("Nucleus of the lateral lemniscus", 4, "grey"),
        ("Striatum ventral region", 2, "grey"),
        ("Ventral tegmental area", 2, "grey"),
        ("Pedunculopontine part", 2, "grey"),
        ("Anterior cingulate area", 3, "grey"),
        ("Paraventricular hypothalamic nucleus", 14, "grey"),
        ("Periventricular zone", 14, "grey"),
        ("Periaqueductal gray", 2, "grey"),
        ("subependymal zone", 21, "grey"),
        ("Ventricular zone", 21, "grey"),
        ("Cortical subplate", 3, "grey"),
        ("third ventricle", 1, "ventricle"),
        ("cerebral aqueduct", 5, "ventricle"),
        ("central canal", 1, "ventricle"),
        ("choroid plexus", 21, "ventricle"),
        ("temporal horn", 21, "ventricle"),
        ("Background", None, "outside"),
    ],
)
def test_tissue_follows_the_name_then_the_ancestry(name, parent, tissue):
    assert derived(name, parent).tissue == tissue


def test_acronym_suffixes_are_layers_only_where_siblings_are_a_whole_set():
    area = Structure(30, "SBF", "Whisker field", 3)
    names = {"1": 31, "2/3": 32, "4": 33, "5": 34, "6a": 35}
    layers = tuple(Structure(k, "SBF" + s, f"Whisker field {s}", 30) for s, k in names.items())
    fields = (
        Structure(40, "PAR", "Parietal cortex", 3),
        Structure(41, "PAR1", "first", 40),
        Structure(42, "PAR2", "second", 40),
    )
    found = {row.acronym: row.layer for row in derive((*ROWS, area, *layers, *fields))}
    assert [found["SBF" + s] for s in names] == list(names)
    assert found["PAR1"] == found["PAR2"] == found["CA1"] == ""


def test_columns_that_the_table_fills_are_kept():
    row = Structure(100, "X", "Primary visual area, layer 4", 19, layer="granular", tissue="white")
    assert derive((*ROWS, row), given=("layer", "tissue"))[-1] == row
    assert derive((*ROWS, row))[-1].layer == "4"


def test_white_matter_has_no_layer():
    assert derived("Primary visual area, layer 6 fibers", 19).layer == ""

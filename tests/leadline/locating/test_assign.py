"""Contacts to regions, on a striped atlas whose answers have closed forms."""

import numpy as np
import pytest
from scipy.stats import norm

from leadline.locating.assign import locate, probabilities
from leadline.locating.table import channel_rows
from leadline.model.anchor import Anchor
from leadline.model.atlas import Atlas, Structure, Structures
from leadline.model.channels import CHANNEL_COLUMNS
from leadline.model.posterior import DepthPosterior
from leadline.model.probe import Probe
from leadline.model.track import Track
from leadline.model.volume import Volume

STRIPE_UM = 400.0


@pytest.fixture(scope="module")
def atlas():
    """Stripes 400 um thick along DV, 50 um voxels; nothing above dv = 975 um."""
    labels = np.zeros((40, 80, 40), np.uint32)
    for stripe in range(3):
        labels[:, 20 + 8 * stripe : 28 + 8 * stripe] = stripe + 1
    labels[:, 44:] = 4
    rows = (
        Structure(9, "root", "root", None),
        Structure(1, "CX1", "cortex layer 1", 5, layer="1"),
        Structure(2, "CX2", "cortex layer 2", 5, layer="2"),
        Structure(5, "CX", "cortex", 9, coarse=True),
        Structure(3, "wm", "white matter", 9, tissue="white", coarse=True),
        Structure(4, "TH", "thalamus", 9, coarse=True),
    )
    grid = Volume(labels, [50.0] * 3, "PIR")
    return Atlas("stripes", grid, grid, Structures(rows), bregma_um=np.array([500.0, 0.0, 1000.0]))


@pytest.fixture(scope="module")
def track():
    """Straight down from dv = 975 um, where the labels begin."""
    points = np.column_stack([np.full(50, 1000.0), 975.0 + np.linspace(0, 2000, 50), np.full(50, 1000.0)])
    return Track("A", 0, points, points, np.full(50, 20.0), 10.0, 30.0)


def draws_about(tip, sd, n=4000):
    z = norm.ppf((np.arange(n) + 0.5) / n)
    return DepthPosterior("A", 0, tip, 2000.0 - tip + sd * z[:, None], informed=0.9)


def test_the_region_is_the_structure_at_the_point(atlas, track):
    tip = np.array([100.0, 1000.0, 1300.0, 1900.0, 2200.0])
    found = locate(tip, track, draws_about(tip, 20.0), atlas, [], registration_error_um=10.0)
    assert found.region_id.tolist() == [4, 3, 2, 1, 0]
    assert found.region_id.tolist() == atlas.label_at(found.atlas_um).tolist()


def test_p_region_is_the_normal_probability_of_staying_in_the_stripe(atlas, track):
    tip, sd = np.array([1300.0]), 150.0
    found = locate(tip, track, draws_about(tip, sd), atlas, [], registration_error_um=0.0)
    depth = 700.0  # the stripe of CX2 reaches from 400 to 800 um
    expected = norm.cdf((800 - depth) / sd) - norm.cdf((400 - depth) / sd)
    assert found.p_region[0] == pytest.approx(expected, abs=0.01)
    expected_coarse = norm.cdf((800 - depth) / sd) - norm.cdf((0 - depth) / sd)
    assert found.p_coarse[0] == pytest.approx(expected_coarse, abs=0.01)


def test_probabilities_of_a_contact_sum_to_one_and_agree_with_p_region(atlas, track):
    tip = np.array([1180.0, 1600.0])
    found = locate(tip, track, draws_about(tip, 100.0), atlas, [], registration_error_um=30.0)
    shares = probabilities(found)
    for row in range(2):
        mine = {i: p for r, i, p in shares if r == row}
        assert sum(mine.values()) == pytest.approx(1.0, abs=0.01)
        assert mine[int(found.region_id[row])] == pytest.approx(found.p_region[row])


def test_border_distance_is_exact(atlas, track):
    tip = np.array([1000.0, 1300.0])
    found = locate(tip, track, draws_about(tip, 1.0), atlas, [], registration_error_um=0.0)
    assert found.boundary_um == pytest.approx([200.0, 100.0], abs=0.1)


def test_basis_says_what_placed_a_channel(atlas, track):
    tip = np.array([500.0, 1000.0, 1500.0])
    anchors = [Anchor("A", 0, 700.0, 1300.0), Anchor("A", 0, 1200.0, 800.0)]
    told = locate(tip, track, draws_about(tip, 10.0), atlas, anchors, registration_error_um=0.0)
    assert told.basis == ("beyond", "between", "beyond")
    assert locate(tip, track, draws_about(tip, 10.0), atlas, [], registration_error_um=0.0).basis[0] == "physiology"


def test_the_table_has_the_contract_columns_and_stereotaxic_ones(atlas, track):
    tip = np.array([100.0, 2200.0])
    probe = Probe(("a", "b"), [0, 0], tip, [0, 0], [0, 1])
    table = channel_rows(
        "kestrel", "A", probe, atlas, locate(tip, track, draws_about(tip, 10.0), atlas, [], registration_error_um=5.0)
    )
    assert tuple(table.columns[: len(CHANNEL_COLUMNS)]) == CHANNEL_COLUMNS
    assert table["stereo_ap_mm"].tolist() == pytest.approx([-0.5, -0.5])
    assert table["stereo_ml_mm"].tolist() == pytest.approx([0.0, 0.0])
    assert table["region"].tolist() == ["TH", "outside"]
    assert table["in_brain"].tolist() == [True, False]


def test_the_same_seed_gives_the_same_answer(atlas, track):
    tip = np.arange(100.0, 1900.0, 20.0)
    a, b = (
        locate(tip, track, draws_about(tip, 60.0, 100), atlas, [], registration_error_um=30.0, seed=3) for _ in "ab"
    )
    assert np.array_equal(a.region_draws, b.region_draws)

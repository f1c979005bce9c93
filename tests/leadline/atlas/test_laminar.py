"""Cortical depth against the closed forms of Laplace's equation: slab, cylinder, sphere."""

import numpy as np
import pytest

from leadline.atlas.laminar import (
    LAYER_SETS,
    CorticalDepth,
    cortex_ids,
    cortical_depth,
    depth_columns,
    layer_at,
    require_chosen,
    solve,
)
from leadline.base.errors import LeadlineError
from leadline.model.atlas import Atlas, Structure, Structures
from leadline.model.volume import Volume

CUBE = np.array([50.0, 50.0, 50.0])


def test_between_planes_depth_is_even():
    cortex, outside, white = (np.zeros((6, 16, 5), bool) for _ in range(3))
    outside[:, :3], cortex[:, 3:13], white[:, 13:] = True, True, True
    found = solve(cortex, outside, white, np.array([30.0, 50.0, 80.0]))
    expected = (np.arange(10) + 0.5) / 10
    assert np.allclose(found[:, 3:13], expected[None, :, None], atol=1e-5)
    assert np.isnan(found[:, :3]).all()


@pytest.mark.parametrize("dimensions", [2, 3])
def test_between_round_surfaces_depth_is_the_potential_of_a_condenser(dimensions):
    """Closed forms: ln(b/r)/ln(b/a) between cylinders, (1/r - 1/b)/(1/a - 1/b) between spheres, a the inner radius."""
    at = np.stack(np.meshgrid(*[np.arange(61) - 30.0] * 3, indexing="ij"), -1)
    r = np.linalg.norm(at[..., :dimensions], axis=-1)
    a, b = 12.0, 26.0
    thin = (slice(None), slice(None), slice(0, 3)) if dimensions == 2 else (slice(None),) * 3
    r = r[thin]
    found = solve((r >= a) & (r < b), r >= b, r < a, CUBE)
    inside = (r > a + 1) & (r < b - 1)
    expected = np.log(b / r) / np.log(b / a) if dimensions == 2 else (1 / r - 1 / b) / (1 / a - 1 / b)
    error = np.abs(found - expected)[inside]
    assert np.median(error) < 0.25 / (b - a)  # a quarter of a voxel: the surfaces are stairs
    assert np.percentile(error, 99) < 0.04


def test_depth_lies_between_its_surfaces_and_grows_inward():
    """The maximum principle: no extremum inside."""
    rng = np.random.default_rng(4)
    top = np.rint(5 + 2 * np.sin(np.arange(30) / 4)).astype(int)
    row = np.arange(30)[None, :, None]
    cortex = (row >= top[:, None, None]) & (row < top[:, None, None] + rng.integers(9, 12, (30, 1, 1)))
    cortex = np.broadcast_to(cortex, (30, 30, 6)).copy()
    outside = np.broadcast_to(row < top[:, None, None], cortex.shape)
    white = ~cortex & ~outside
    found = solve(cortex, outside, white, CUBE)[cortex]
    assert (found > 0).all()
    assert (found < 1).all()


def test_the_hemispheres_do_not_leak_into_each_other():
    cortex, outside, white = (np.zeros((4, 12, 20), bool) for _ in range(3))
    white[:, :, 3:5] = white[:, :, 15:17] = True
    cortex[:, :, 5:15] = True
    found = solve(cortex, outside, white, CUBE, midline=10)
    assert np.allclose(found[2, 6, 5:10], [0.9, 0.7, 0.5, 0.3, 0.1], atol=1e-4)
    assert np.allclose(found[2, 6, 10:15], [0.1, 0.3, 0.5, 0.7, 0.9], atol=1e-4)


def test_a_piece_that_meets_one_surface_alone_has_no_depth():
    cortex, outside, white = (np.zeros((8, 16, 4), bool) for _ in range(3))
    outside[:, :3], cortex[:4, 3:9], white[:4, 9:], cortex[5:, 3:9] = True, True, True, True
    found = solve(cortex, outside, white, CUBE)
    assert np.isfinite(found[:4, 3:9]).all()
    assert np.isnan(found[5:]).all()


def made_atlas(*, layers=True, white="white"):
    labels = np.zeros((10, 40, 20), np.uint32)
    labels[:, 5:15], labels[:, 15:25], labels[:, 25:30], labels[:, 30:] = 1, 2, 3, 4
    labels[:, 30:, :10] = 0  # no mirror image of itself: one hemisphere
    rows = (
        Structure(9, "root", "root", None),
        Structure(8, "CTX", "Isocortex", 9),
        Structure(1, "V1", "Area, upper", 8, layer="2/3" if layers else ""),
        Structure(2, "V5", "Area, lower", 8, layer="5" if layers else ""),
        Structure(3, "cc", "Corpus callosum", 9, tissue=white),
        Structure(4, "CA1sp", "Field CA1, pyramidal layer", 9, layer="sp"),
    )
    if not layers:
        rows = (*rows[:-1], Structure(4, "CA1", "Field CA1", 9))
    grid = Volume(labels, [50.0] * 3, "PIR")
    return Atlas("made", grid, grid, Structures(rows))


@pytest.mark.parametrize("layers", [True, False])
def test_cortex_is_found_by_layers_or_by_name(layers):
    ids = cortex_ids(made_atlas(layers=layers).structures)
    assert {1, 2} <= set(ids)
    assert 4 not in ids


def test_depth_of_an_atlas_and_what_a_table_gets():
    atlas = made_atlas()
    depth = cortical_depth(atlas)
    points = np.array([[250.0, 225 + 500.0, 500.0], [250.0, 1600.0, 500.0], [np.nan] * 3, [250.0, 1200.0, 500.0]])
    region = np.array([1, 4, -1, 2])
    found, layer, source = depth_columns(points, region, ["2/3", "sp", "", "5"], depth, atlas.structures)
    assert found[0] == pytest.approx(0.5, abs=1e-3)
    assert np.isnan(found[1:3]).all()
    assert found[3] == pytest.approx(0.975, abs=0.01)
    assert layer == ("2/3", "sp", "", "5")
    assert source == ("atlas", "atlas", "", "atlas")


def test_layers_are_made_up_only_when_asked_and_say_so():
    atlas = made_atlas(layers=False)
    depth = cortical_depth(atlas)
    points, region = np.array([[250.0, 680.0, 500.0], [250.0, 1600.0, 500.0]]), np.array([1, 4])
    assert depth_columns(points, region, ["", ""], depth, atlas.structures)[1:] == (("", ""), ("", ""))
    chosen = [("CTX", "mouse visual cortex")]
    _, layer, source = depth_columns(points, region, ["", ""], depth, atlas.structures, chosen)
    assert layer == ("4", "")
    assert source == ("fractions: mouse visual cortex", "")
    nearer = [*chosen, ("V1", "mouse barrel cortex")]
    assert depth_columns(points, region, ["", ""], depth, atlas.structures, nearer)[2][0].endswith("barrel cortex")
    elsewhere = [("V5", "mouse visual cortex")]
    assert depth_columns(points, region, ["", ""], depth, atlas.structures, elsewhere)[1] == ("", "")
    of_its_own = depth_columns(points, region, ["x", ""], depth, atlas.structures, chosen)
    assert of_its_own[1:] == (("x", ""), ("atlas", ""))


def test_layers_for_a_structure_or_from_a_set_that_is_none_are_refused():
    structures = made_atlas().structures
    with pytest.raises(LeadlineError, match=r"no structure 'CTC'. Did you mean 'CTX'"):
        require_chosen([("CTC", "mouse visual cortex")], structures)
    with pytest.raises(
        LeadlineError, match=r"no set of layer fractions 'mouse visual'. Did you mean 'mouse visual cortex'"
    ):
        require_chosen([("CTX", "mouse visual")], structures)


def test_published_fractions_are_ascending_and_end_at_the_white_matter():
    for borders in LAYER_SETS.values():
        values = [border for _, border in borders]
        assert values == sorted(values)
        assert values[-1] == 1.0
        assert layer_at(0.0, borders) == "1"
        assert layer_at(1.0, borders) == borders[-1][0]


def test_an_atlas_without_white_matter_or_cortex_is_told():
    with pytest.raises(LeadlineError, match="does not lie between"):
        cortical_depth(made_atlas(white="grey"))
    atlas = made_atlas(layers=False)
    rows = tuple(r for r in atlas.structures.rows if r.name != "Isocortex")
    rows = tuple(Structure(r.id, r.acronym, r.name, None, tissue=r.tissue) for r in rows)
    with pytest.raises(LeadlineError, match="no structure is cortex"):
        cortical_depth(Atlas("x", atlas.labels, atlas.template, Structures(rows)))


def test_between_grid_points_depth_is_linear_and_nan_far_away():
    values = np.full((3, 3, 3), np.nan, np.float32)
    values[1, :, 1] = [0.1, 0.5, 0.9]
    depth = CorticalDepth(values, CUBE, np.zeros(3))
    assert depth.at(np.array([[50.0, 75.0, 50.0], [60.0, 50.0, 50.0], [500.0, 50.0, 50.0]])).tolist() == pytest.approx(
        [0.7, 0.5, np.nan], abs=1e-6, nan_ok=True
    )

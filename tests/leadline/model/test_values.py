"""Depth maps, anchors, tracks, transforms, structures."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.model.anchor import Anchor, in_order
from leadline.model.atlas import Structure, Structures
from leadline.model.depth_map import DepthMap
from leadline.model.probe import Probe
from leadline.model.track import Track, along, arc_length
from leadline.model.transform import Affine, Field, PointTransform

steps = st.lists(st.floats(5.0, 500.0), min_size=1, max_size=8)


@given(steps, st.data())
def test_a_depth_map_is_monotone_passes_its_knots_and_has_slope_one_beyond(tip_steps, data):
    depth_steps = data.draw(st.lists(st.floats(5.0, 500.0), min_size=len(tip_steps), max_size=len(tip_steps)))
    tip, depth = np.cumsum(tip_steps), 4000.0 - np.cumsum(depth_steps)
    depth_map = DepthMap(tip, depth)
    assert depth_map(tip) == pytest.approx(depth)
    grid = np.linspace(tip[0] - 300, tip[-1] + 300, 400)
    assert (np.diff(depth_map(grid)) < 0).all()
    assert depth_map(np.array([tip[0] - 250.0]))[0] == pytest.approx(depth[0] + 250.0)
    assert depth_map(np.array([tip[-1] + 250.0]))[0] == pytest.approx(depth[-1] - 250.0)


def test_a_folded_depth_map_is_refused():
    with pytest.raises(LeadlineError, match="may stretch but not fold"):
        DepthMap(np.array([100.0, 300.0]), np.array([400.0, 500.0]))


def test_stretch_is_the_slope():
    depth_map = DepthMap(np.array([0.0, 1000.0]), np.array([3000.0, 1900.0]))
    assert depth_map.stretch(np.array([500.0]))[0] == pytest.approx(1.1)


def test_crossing_anchors_are_both_named():
    anchors = [Anchor("A", 0, 500.0, 2000.0, landmark="upper"), Anchor("A", 0, 300.0, 1900.0, note="lower")]
    with pytest.raises(LeadlineError, match=r"'upper' \(tip distance 500 .*'lower' \(tip distance 300"):
        in_order(anchors)


@pytest.mark.parametrize("value", [float("nan"), float("inf")])
def test_an_anchor_without_a_number_is_refused(value):
    with pytest.raises(LeadlineError, match="track_depth_um is not a finite number"):
        Anchor("A", 0, 1.0, value)


def test_arc_length_of_an_arc_is_radius_times_angle():
    # Closed form: R = 3000 um, 0.5 rad -> 1500 um.
    angle = np.linspace(0, 0.5, 2000)
    arc = 3000.0 * np.column_stack([np.cos(angle), np.sin(angle), 0 * angle])
    assert arc_length(arc)[-1] == pytest.approx(1500.0, abs=1e-3)


def test_a_curve_goes_straight_on_beyond_its_ends():
    points = np.column_stack([np.zeros(11), np.linspace(0, 1000, 11), np.zeros(11)])
    at = along(arc_length(points), points, np.array([-100.0, 500.0, 1200.0]))
    assert at[:, 1].tolist() == pytest.approx([-100.0, 500.0, 1200.0])


def test_a_track_measures_depth_in_atlas_space():
    stack = np.array([[0, 0, 0], [0, 100, 0.0]])
    track = Track("A", 0, stack, stack * 1.2, np.full(2, 20.0), 10.0, 20.0)
    assert track.length_um == pytest.approx(120.0)
    assert track.stack_at(np.array([60.0]))[0, 1] == pytest.approx(50.0)


def test_an_affine_is_undone_by_its_inverse():
    rng = np.random.default_rng(0)
    affine = Affine(np.eye(3) + rng.normal(0, 0.1, (3, 3)), rng.normal(0, 1000, 3))
    points = rng.normal(0, 5000, (50, 3))
    assert affine.inverse()(affine(points)) == pytest.approx(points)
    assert affine.after(affine.inverse())(points) == pytest.approx(points)


def test_a_field_is_linear_between_nodes_and_zero_beyond_them():
    displacement = np.zeros((5, 5, 5, 3))
    displacement[2, 2, 2, 1] = 30.0
    transform = PointTransform(field=Field(displacement, np.full(3, 100.0), np.zeros(3)))
    moved = transform(np.array([[200.0, 200, 200], [250, 200, 200], [-500, 0, 0]]))
    assert moved[:, 1].tolist() == pytest.approx([230.0, 215.0, 0.0])


def _tree():
    return Structures(
        (
            Structure(1, "root", "root", None),
            Structure(2, "VA", "visual area", 1),
            Structure(4294967295, "VA4", "visual area, layer 4", 2, layer="4"),
        )
    )


def test_a_layer_is_coarsened_to_its_area_where_nothing_is_marked():
    assert _tree().coarse(4294967295).acronym == "VA"
    assert _tree().coarse(2).acronym == "VA"


def test_marks_decide_what_is_coarse():
    marked = Structures((*_tree().rows[:1], Structure(7, "CTX", "cortex", 1, coarse=True), Structure(8, "x", "x", 7)))
    assert marked.coarse(8).acronym == "CTX"


@pytest.mark.parametrize(
    ("rows", "words"),
    [
        ((Structure(1, "a", "a", 9),), "has parent 9"),
        ((Structure(1, "a", "a", None), Structure(1, "b", "b", None)), "id 1 has two rows"),
        ((Structure(1, "a", "a", 2), Structure(2, "b", "b", 1)), "its own ancestor"),
        ((Structure(0, "a", "a", None),), "kept for outside"),
    ],
)
def test_a_broken_tree_is_refused(rows, words):
    with pytest.raises(LeadlineError, match=words):
        Structures(rows)


def test_a_trace_wired_twice_is_refused():
    with pytest.raises(LeadlineError, match="trace 3 is wired to two"):
        Probe(("a", "b"), [0, 0], [0, 20], [0, 0], [3, 3])

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.atlas.crossing import runs_along
from leadline.base.errors import LeadlineError


def layered(*borders):
    """Labels 1, 2, ... from the top, borders at the given dv."""
    return lambda points: 1 + np.searchsorted(borders, points[:, 1], side="right")


def straight(length, n=2):
    depth = np.linspace(0, length, n)
    return np.column_stack([np.zeros(n), depth, np.zeros(n)]), depth


def test_borders_are_found_within_half_a_micrometre():
    points, depth = straight(1000.0)
    runs = runs_along(layered(123.4, 130.1, 777.7), points, depth)
    assert runs.structure_id.tolist() == [1, 2, 3, 4]
    assert np.abs(runs.edge_um - [0, 123.4, 130.1, 777.7, 1000]).max() <= 0.25


@settings(deadline=None)
@given(
    st.lists(st.floats(20, 1980), min_size=1, max_size=8, unique=True)
    .map(sorted)
    .filter(lambda b: len(b) < 2 or np.diff(b).min() > 6)
)
def test_every_run_longer_than_a_step_is_found(borders):
    points, depth = straight(2000.0, 7)
    runs = runs_along(layered(*borders), points, depth)
    assert runs.structure_id.tolist() == list(range(1, len(borders) + 2))
    assert np.abs(runs.edge_um[1:-1] - borders).max() <= 0.25


def test_a_bent_track_is_followed_along_its_arc():
    points = np.array([[0.0, 0, 0], [0, 300, 0], [400, 300, 0]])
    runs = runs_along(lambda p: np.where(p[:, 0] > 150, 7, 3), points, np.array([0.0, 300, 700]))
    assert runs.structure_id.tolist() == [3, 7]
    assert runs.edge_um[1] == pytest.approx(450, abs=0.25)


def test_distance_to_the_nearest_border_and_structure_at_a_depth():
    points, depth = straight(1000.0)
    runs = runs_along(layered(200, 600), points, depth)
    at = np.array([-50.0, 0, 199, 390, 401, 700, 1200])
    assert runs.id_at(at).tolist() == [1, 1, 1, 2, 2, 3, 3]
    assert runs.boundary_distance(at) == pytest.approx([250, 200, 1, 190, 199, 100, 600], abs=0.3)


def test_a_track_in_one_structure_has_no_border():
    points, depth = straight(100.0)
    runs = runs_along(lambda p: np.full(len(p), 5), points, depth)
    assert runs.structure_id.tolist() == [5]
    assert np.isinf(runs.boundary_distance(np.array([50.0]))).all()


def test_a_track_needs_ascending_depths():
    with pytest.raises(LeadlineError, match="two points or more at ascending depths"):
        runs_along(layered(1), np.zeros((2, 3)), np.array([5.0, 5.0]))

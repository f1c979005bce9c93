import numpy as np
import pytest

from leadline.base.errors import LeadlineError
from leadline.model.transform import Affine, Field, PointTransform, Registration
from leadline.registration.pairs import REACH_UM, pair_errors, refined

MATRIX = np.array([[0.0, -1.05, 0.02], [-0.97, 0.03, 0], [0, 0.01, -1.02]])


def registration(with_field: bool) -> Registration:
    field = back_field = None
    if with_field:
        rng = np.random.default_rng(3)
        values = np.zeros((40, 40, 40, 3), np.float32)
        values[2:-2, 2:-2, 2:-2] = 40.0 * rng.normal(size=3).astype(np.float32)
        from scipy.ndimage import gaussian_filter

        values = np.stack([gaussian_filter(values[..., k], 2.0) for k in range(3)], axis=-1)
        values[[0, -1]] = values[:, [0, -1]] = values[:, :, [0, -1]] = 0
        field = Field(values, np.full(3, 300.0), np.full(3, -1000.0))
        back_field = Field(-values, np.full(3, 300.0), np.full(3, -1000.0))
    last = Affine(np.diag([1.03, 0.98, 1.0]), np.array([120.0, -50.0, 10.0]))
    first = Affine(MATRIX, np.array([9000.0, 8000.0, 10000.0]))
    there = PointTransform(first, field, last)
    back = PointTransform(last.inverse(), back_field, first.inverse())
    return Registration(there, back, 40.0, {})


PLACES = np.array([[3000.0, 4000, 5000], [4500, 3500, 5600], [2500, 5200, 4300], [6000, 6000, 6000]])


@pytest.mark.parametrize("with_field", [False, True])
def test_pairs_pull_the_transform_to_them_and_its_inverse_follows(with_field):
    old = registration(with_field)
    wanted = old.stack_to_atlas(PLACES) + np.array([[120.0, -60, 40], [100, -80, 30], [90, -40, 60], [0, 0, 0]])
    new = refined(old, PLACES, wanted)
    left = np.linalg.norm(new.stack_to_atlas(PLACES) - wanted, axis=1)
    assert left.max() < 20.0
    rng = np.random.default_rng(4)
    around = PLACES[rng.integers(0, 4, 200)] + rng.normal(0, 700, (200, 3))
    there = new.stack_to_atlas(around)
    loop = np.linalg.norm(new.atlas_to_stack(there) - around, axis=1)
    old_loop = np.linalg.norm(old.atlas_to_stack(old.stack_to_atlas(around)) - around, axis=1)
    assert np.median(loop) < np.median(old_loop) + 3.0
    assert loop.max() < old_loop.max() + 12.0


def test_far_from_every_pair_nothing_changes():
    old = registration(True)
    far = PLACES[:1] + np.array([[0.0, 0, 1.3 * REACH_UM]])
    new = refined(old, PLACES[:1], old.stack_to_atlas(PLACES[:1]) + 100.0)
    np.testing.assert_allclose(new.stack_to_atlas(far), old.stack_to_atlas(far), atol=1.0)


def test_no_pairs_leave_the_registration_alone_and_a_wild_one_is_refused():
    old = registration(False)
    assert refined(old, np.zeros((0, 3)), np.zeros((0, 3))) is old
    with pytest.raises(LeadlineError, match="a pair lies 2000 um off; a correction by hand reaches 1000 um"):
        refined(old, PLACES[:1], old.stack_to_atlas(PLACES[:1]) + np.array([[2000.0, 0, 0]]))


def test_errors_are_told_before_after_and_honestly_with_each_pair_left_out():
    old = registration(False)
    smooth = np.array([80.0, -50.0, 20.0])
    near = PLACES[0] + np.random.default_rng(5).normal(0, 300, (6, 3))
    errors = pair_errors(old, near, old.stack_to_atlas(near) + smooth)
    np.testing.assert_allclose(errors.before_um, np.linalg.norm(smooth))
    assert errors.after_um.max() < 5.0
    assert 0.5 < np.median(errors.left_out_um) < 0.5 * np.linalg.norm(smooth)
    assert pair_errors(old, near[:1], old.stack_to_atlas(near[:1]) + smooth).left_out_um[0] == pytest.approx(
        np.linalg.norm(smooth)
    )


def test_pairs_that_contradict_each_other_meet_half_way():
    old = registration(False)
    place = np.repeat(PLACES[:1], 2, axis=0)
    falls = old.stack_to_atlas(place)
    new = refined(old, place, falls + np.array([[100.0, 0, 0], [-100.0, 0, 0]]))
    np.testing.assert_allclose(new.stack_to_atlas(place), falls, atol=1.0)

"""Sizes along the stored axes, and the sentences about them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from leadline.model.transform import Affine, PointTransform, Registration
from leadline.registration.plausible import doubts, sizes

TURN = Rotation.from_rotvec([0.3, -0.2, 0.1]).as_matrix()


def registration(size=(0.94, 0.96, 0.93), likeness=0.45, turn=TURN):
    last = Affine(np.diag(size) @ turn, np.zeros(3))
    quality = {"local_correlation": likeness}
    return Registration(PointTransform(first=last.inverse()), PointTransform(last=last), 30.0, quality)


@given(vector=st.tuples(*[st.floats(-0.6, 0.6)] * 3), size=st.tuples(*[st.floats(0.3, 3.0)] * 3))
def test_sizes_do_not_depend_on_the_tilt(vector, size):
    found = sizes(registration(size, turn=Rotation.from_rotvec(vector).as_matrix()))
    assert found == pytest.approx(np.asarray(size))


def test_a_brain_that_shrank_as_brains_do_is_not_doubted():
    assert doubts(registration()) == ()
    assert doubts(registration((0.8, 0.8, 0.75))) == ()


@pytest.mark.parametrize(("factor", "told"), [(2.0, "about 1.9"), (0.5, "about 2.1")])
def test_a_wrong_factor_is_said_with_its_size(factor, told):
    (sentence,) = doubts(registration(factor * np.array([0.94, 0.96, 0.93])))
    assert told in sentence
    assert "voxel_um" in sentence


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_one_wrong_size_is_said_with_its_axis(axis):
    size = np.array([0.94, 0.96, 0.93])
    size[axis] *= 1.3
    (sentence,) = doubts(registration(size))
    assert f"voxel_um of axis {axis}" in sentence


def test_little_likeness_is_said():
    (sentence,) = doubts(registration(likeness=0.2))
    assert "little alike (local correlation 0.20" in sentence

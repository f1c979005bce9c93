"""Codes of one handedness; tilt of an affine."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from leadline.model.frames import ALL_CODES, axes_matrix
from leadline.model.transform import Affine
from leadline.registration.orient import same_handed, tilt_deg


@pytest.mark.parametrize("code", ALL_CODES)
def test_every_code_has_24_of_its_handedness(code: str) -> None:
    codes = same_handed(code)
    assert len(codes) == 24
    assert code in codes
    for other in codes:
        turn = axes_matrix(code) @ axes_matrix(other).T
        assert np.linalg.det(turn) == pytest.approx(1.0)


@given(angle=st.floats(1.0, 170.0), axis=st.tuples(*[st.floats(0.1, 1.0)] * 3))
def test_tilt_is_the_angle_of_the_rotation(angle: float, axis: tuple[float, float, float]) -> None:
    """Whatever the stretch along the axes, of scipy's rotation vector."""
    unit = np.asarray(axis) / np.linalg.norm(axis)
    matrix = Rotation.from_rotvec(np.radians(angle) * unit).as_matrix() * 0.93
    assert tilt_deg(Affine(matrix, np.zeros(3))) == pytest.approx(angle, abs=1e-3)

"""Orientation codes."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.model.frames import ALL_CODES, as_pir, axes_matrix, from_pir, orientation, voxel_as_pir

codes = st.sampled_from(ALL_CODES)


def test_there_are_48_codes():
    assert len(set(ALL_CODES)) == 48


@given(codes)
def test_a_volume_goes_to_pir_and_back(code):
    volume = np.arange(24).reshape(2, 3, 4)
    assert np.array_equal(from_pir(as_pir(volume, code), code), volume)


@given(codes, st.integers(0, 1), st.integers(0, 2), st.integers(0, 3))
def test_a_marked_voxel_lands_where_its_vector_points(code, i, j, k):
    volume = np.zeros((2, 3, 4))
    volume[i, j, k] = 1
    from_corner = axes_matrix(code) @ np.array([i, j, k], float)
    corner = np.minimum(axes_matrix(code) @ (np.array(volume.shape) - 1.0), 0)
    assert np.argwhere(as_pir(volume, code))[0].tolist() == (from_corner - corner).astype(int).tolist()


def test_24_codes_have_each_handedness():
    assert sum(np.linalg.det(axes_matrix(c)) > 0 for c in ALL_CODES) == 24


def test_voxel_sizes_follow_their_axes():
    assert voxel_as_pir([1.0, 2.0, 3.0], "LPS").tolist() == [2.0, 3.0, 1.0]


@pytest.mark.parametrize("bad", ["PIX", "PPI", "PI", "", "PIRA", None, 7])
def test_a_wrong_code_is_named(bad):
    with pytest.raises(LeadlineError, match="three-letter code"):
        orientation(bad)

"""Smoothing to the bits of scipy's, so that where a stack is cut never shows."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.ndimage import gaussian_filter

from leadline.tracing.ridge import TRUNCATE, smoothed


@settings(deadline=None, max_examples=30)  # the first call compiles
@given(
    st.tuples(*[st.integers(1, 20)] * 3),
    st.tuples(*[st.floats(0.3, 4.0)] * 3),
    st.integers(0, 2**32 - 1),
)
def test_it_is_scipys_gaussian_to_the_bit(shape, sigma_vox, seed):
    block = np.random.default_rng(seed).normal(0, 100, shape).astype(np.float32)
    wanted = gaussian_filter(block, sigma_vox, truncate=TRUNCATE, mode="nearest")
    np.testing.assert_array_equal(smoothed(block, np.array(sigma_vox)), wanted)


@pytest.mark.parametrize("shape", [(3, 5, 700), (2, 700, 4)])
def test_rows_longer_than_a_tile(shape):
    block = np.random.default_rng(1).normal(0, 1, shape).astype(np.float32)
    wanted = gaussian_filter(block, (1, 2, 3), truncate=TRUNCATE, mode="nearest")
    np.testing.assert_array_equal(smoothed(block, np.array([1.0, 2.0, 3.0])), wanted)

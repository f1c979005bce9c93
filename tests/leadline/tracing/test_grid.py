"""Coarser grids and corridors: means, frames, and no more read than needed."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.model.volume import Volume
from leadline.tracing import grid


class Counted:
    """Voxels that remember how many were read at once."""

    def __init__(self, array):
        self.array, self.shape, self.dtype, self.most = array, array.shape, array.dtype, 0

    def __getitem__(self, key):
        block = self.array[key]
        self.most = max(self.most, block.size)
        return block


def ramp(shape, voxel):
    index = np.stack(np.meshgrid(*map(np.arange, shape), indexing="ij"), axis=-1)
    return Volume((index * np.asarray(voxel)) @ [1.0, 2.0, -0.5] + 500, np.asarray(voxel, float), "PIR")


@settings(max_examples=15, deadline=None)
@given(st.tuples(*[st.integers(6, 17)] * 3), st.tuples(*[st.sampled_from([4.0, 8.0, 10.0, 25.0, 36.0])] * 3))
def test_a_reduced_ramp_is_the_same_ramp_in_um(shape, voxel):
    """Frames are kept to the half voxel: a linear image has the same value at the same place."""
    volume = ramp(shape, voxel)
    small = grid.reduced(volume, 24.0)
    centre = small.points(np.array([[0.0, 0, 0], np.array(small.shape) - 1.0]))
    want = centre @ [1.0, 2.0, -0.5] + 500
    np.testing.assert_allclose([small.array()[0, 0, 0], small.array()[-1, -1, -1]], want, rtol=1e-5)


def test_reduction_reads_slabs(monkeypatch):
    monkeypatch.setattr(grid, "SLAB_VOXELS", 4000)
    data = Counted(np.random.default_rng(0).integers(0, 900, (60, 40, 20)).astype(np.uint16))
    small = grid.reduced(Volume(data, np.full(3, 10.0), "PIR"), 20.0)
    assert data.most <= 4000
    np.testing.assert_allclose(small.array()[3, 4, 5], data.array[6:8, 8:10, 10:12].mean(), rtol=1e-6)


def test_sampling_reads_the_corridor_only(monkeypatch):
    monkeypatch.setattr(grid, "READ_VOXELS", 3000)
    data = Counted(np.ones((100, 100, 100), np.float32))
    line = np.linspace([0, 0, 0], [990, 990, 990], 400)
    assert (grid.sampled(Volume(data, np.full(3, 10.0), "PIR"), line) == 1).all()
    assert data.most <= 3000


def test_sampling_is_linear_and_nan_outside():
    volume = ramp((9, 8, 7), (10.0, 20.0, 30.0))
    inside = np.array([[33.0, 71.0, 95.0], [5.0, 5.0, 5.0]])
    np.testing.assert_allclose(grid.sampled(volume, inside), inside @ [1.0, 2.0, -0.5] + 500, rtol=1e-5)
    assert np.isnan(grid.sampled(volume, np.array([[-20.0, 5, 5], [5, 5, 300.0]]))).all()


def test_blocks_tile_the_volume_once():
    seen = np.zeros((23, 17, 31), int)
    for outer, inner in grid.blocks(seen.shape, 10, (3, 2, 4)):
        seen[outer][inner] += 1
    assert (seen == 1).all()


def test_channels_of_different_stacks_are_refused():
    one, two = ramp((5, 5, 5), (10, 10, 10)), ramp((5, 5, 6), (10, 10, 10))
    with pytest.raises(LeadlineError, match=r"shape \(5, 5, 5\).*\(5, 5, 6\)"):
        grid.check_frame(one, two)

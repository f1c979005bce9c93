import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from leadline.base.errors import LeadlineError
from leadline.io import reduce
from leadline.io.reduce import reduce_to
from leadline.model.volume import Volume


def by_matrix(voxels, factor):
    """The same mean, as one weight matrix for each axis."""
    out = voxels.astype(float)
    for axis, f in enumerate(factor):
        n = out.shape[axis]
        m = max(1, int(np.rint(n / f - 1e-9)))
        low, high = np.arange(m)[:, None] * f, (np.arange(m)[:, None] + 1) * f
        weight = np.clip(np.minimum(np.arange(n) + 1.0, high) - np.maximum(np.arange(n), low), 0, None)
        weight /= weight.sum(axis=1, keepdims=True)
        out = np.moveaxis(np.tensordot(weight, out, (1, axis)), 0, axis)
    return out


@settings(deadline=None)  # the first call compiles
@given(
    arrays(np.uint16, st.tuples(*[st.integers(2, 14)] * 3), elements=st.integers(0, 60000)).filter(
        lambda a: a.min() < a.max()
    ),
    st.tuples(*[st.floats(1.0, 5.0)] * 3),
    st.sampled_from([None, (1, 2, 3), (4, 4, 4), (99, 99, 1)]),
    st.sampled_from(["C", "F"]),
)
def test_every_output_voxel_is_the_mean_over_its_box(voxels, factor, chunk, order):
    voxel_um = 10.0 / np.array(factor)
    volume = Volume(np.asarray(voxels, order=order), voxel_um, "PIR", chunk=chunk)
    expected = by_matrix(voxels, 10.0 / voxel_um)
    if np.ptp(expected.astype(np.float32)) == 0:
        return
    before, reduce.BLOCK_BYTES = reduce.BLOCK_BYTES, 500
    try:
        result = reduce_to(volume, 10.0)
    finally:
        reduce.BLOCK_BYTES = before
    assert result.shape == expected.shape
    np.testing.assert_allclose(result.data, expected, rtol=2e-5, atol=0.02)


@pytest.mark.parametrize("dtype", ["u1", "i1", "u2", ">u2", "i2", "u4", "i8", "f4", ">f4", "f8", "?"])
def test_any_type_of_number(dtype):
    voxels = np.random.default_rng(0).integers(0, 2, (6, 8, 10)).astype(dtype)
    result = reduce_to(Volume(voxels, (5, 4, 4), "RAS"), 10.0)
    assert result.data.dtype == np.float32
    np.testing.assert_allclose(result.data, by_matrix(voxels, (2, 2.5, 2.5)), rtol=1e-5, atol=1e-6)


def test_frame_of_the_result():
    voxels = np.arange(6 * 7 * 8.0).reshape(6, 7, 8)
    volume = Volume(voxels, (4, 10, 30), "ASR", origin_um=(1, 2, 3))
    result = reduce_to(volume, 12.0)
    assert result.shape == (2, 6, 8)
    assert result.voxel_um.tolist() == [12, 12, 30]
    assert result.origin_um.tolist() == [1 + 4, 2 + 1, 3]
    assert result.code == "ASR"


def test_a_ramp_keeps_its_place():
    index = np.stack(np.meshgrid(*(np.arange(n) for n in (40, 50, 60)), indexing="ij"), -1)
    volume = Volume((index * [4.0, 3.0, 3.0]) @ [1.0, 2.0, 3.0], (4, 3, 3), "PIR")
    result = reduce_to(volume, 11.0)
    grid = np.stack(np.meshgrid(*(np.arange(n - 1) for n in result.shape), indexing="ij"), -1)
    wanted = result.points(grid.reshape(-1, 3).astype(float)) @ [1.0, 2.0, 3.0]
    # voxels that a box cuts count as flat: a tenth of a voxel at most; the far edge may be partly filled
    off_um = (result.data[:-1, :-1, :-1].ravel() - wanted) / np.linalg.norm([1.0, 2.0, 3.0])
    assert np.abs(off_um).max() < 0.1 * 3.0
    assert abs(off_um.mean()) < 0.02 * 3.0


def test_finer_is_never_made():
    voxels = np.random.default_rng(1).normal(size=(4, 5, 6))
    result = reduce_to(Volume(voxels, (8, 8, 8), "PIR"), 5.0)
    np.testing.assert_allclose(result.data, voxels, rtol=1e-6)
    assert result.origin_um.tolist() == [0, 0, 0]


class Counted:
    """Voxels that count how often each is read."""

    def __init__(self, shape):
        self.shape, self.dtype, self.largest = shape, np.dtype(np.uint8), 0
        self.reads = np.zeros(shape, int)

    def __getitem__(self, key):
        self.reads[key] += 1
        block = (np.indices(self.shape).sum(axis=0) % 7).astype(np.uint8)[key]
        self.largest = max(self.largest, block.nbytes)
        return block


@pytest.mark.parametrize("chunk", [(1, 40, 50), (8, 16, 16), (30, 40, 1), (7, 40, 9)])
def test_every_voxel_is_read_once_in_bounded_blocks_of_whole_chunks(monkeypatch, chunk):
    monkeypatch.setattr(reduce, "BLOCK_BYTES", 20_000)
    data = Counted((30, 40, 50))
    reduce_to(Volume(data, (1, 1, 1), "PIR", chunk=chunk), 3.0)
    assert (data.reads == 1).all()
    assert data.largest <= 20_000


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_values_that_are_not_finite_are_refused_with_their_place(bad):
    voxels = np.ones((4, 4, 4), np.float32)
    voxels[1, 2, 3] = bad
    with pytest.raises(LeadlineError, match=r"not finite .* near \(10, 20, 30\) um"):
        reduce_to(Volume(voxels, (10, 10, 10), "PIR"), 10.0)


@pytest.mark.parametrize("value", [0, 7])
def test_an_empty_stack_is_refused(value):
    with pytest.raises(LeadlineError, match=f"the stack is empty: every voxel is {value}"):
        reduce_to(Volume(np.full((4, 4, 4), value, np.uint8), (1, 1, 1), "PIR"), 2.0)


def test_progress_is_told_and_may_cancel():
    class Stop(Exception):
        pass

    class Impatient:
        total = 0

        def begin(self, label, total):
            self.total = total

        def step(self, amount=1.0):
            raise Stop

        def say(self, message): ...

    progress = Impatient()
    with pytest.raises(Stop):
        reduce_to(Volume(np.eye(3)[None] * np.ones((3, 1, 1)), (1, 1, 1), "PIR"), 2.0, progress)
    assert progress.total >= 1

"""Voxels in one piece of a file: whatever is asked for is what numpy would give, and a file cut short is an error."""

from __future__ import annotations

import os

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.io.images import pick
from leadline.io.one_piece import OnePiece

OFFSET = 13


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    """The same numbers in both orders, four axes."""
    folder = tmp_path_factory.mktemp("raw")
    voxels = np.arange(5 * 6 * 7 * 4, dtype=">u2").reshape(5, 6, 7, 4)
    made = {}
    for order in "CF":
        path = folder / order
        path.write_bytes(b"x" * OFFSET + voxels.tobytes(order))
        made[order] = OnePiece(path, voxels.dtype, OFFSET, voxels.shape, order)
    return voxels, made


SLICE = st.builds(slice, st.none() | st.integers(-8, 8), st.none() | st.integers(-8, 8), st.none() | st.integers(1, 3))
KEY = st.lists(SLICE | st.integers(-4, 3), min_size=1, max_size=4).map(tuple)


@settings(max_examples=200, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(key=KEY, order=st.sampled_from("CF"))
def test_slicing_is_that_of_numpy(files, key, order):
    voxels, made = files
    np.testing.assert_array_equal(made[order][key], voxels[key])


@settings(max_examples=100, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(low=st.tuples(*[st.integers(0, 3)] * 4), size=st.tuples(*[st.integers(1, 4)] * 4), order=st.sampled_from("CF"))
def test_pieces_tile_the_block_they_were_asked_for(files, low, size, order, monkeypatch_module):
    voxels, made = files
    key = tuple(slice(a, min(a + n, m)) for a, n, m in zip(low, size, voxels.shape, strict=True))
    seen = np.zeros(voxels.shape, int)
    for start, piece in made[order].pieces(key):
        place = tuple(slice(a, a + n) for a, n in zip(start, piece.shape, strict=True))
        np.testing.assert_array_equal(piece, voxels[place])
        seen[place] += 1
    assert (seen[key] == 1).all()
    assert seen.sum() == seen[key].size


@pytest.fixture(scope="module")
def monkeypatch_module():
    """Pieces so small that a block has many."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("leadline.io.one_piece.PIECE_BYTES", 30)
        yield


def test_reading_backward_is_refused(files):
    with pytest.raises(IndexError, match="forward"):
        files[1]["C"][::-1]


@pytest.mark.parametrize("order", "CF")
def test_a_file_that_is_cut_short_under_the_reading_is_an_error_in_words(tmp_path, order):
    path = tmp_path / "a"
    path.write_bytes(bytes(2**20))
    data = pick(OnePiece(path, np.dtype("u1"), 0, (128, 128, 64), order), "zyx", 0, path)
    assert not data[0:128].any()
    os.truncate(path, 2**19)
    assert data[(slice(0, 1), slice(0, 1), slice(0, 1))].size == 1
    with pytest.raises(LeadlineError, match=r"a: cannot be read \(EOFError: the file ends at byte 524288"):
        data[0:128]
    with pytest.raises(LeadlineError, match="the file ends at byte"):
        list(data.pieces((slice(0, 128), slice(0, 128), slice(0, 64))))

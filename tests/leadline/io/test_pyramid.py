"""The working copy of a stack: means in their places, whatever the source; stops, kills and full disks."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import time
from collections import namedtuple

import numpy as np
import pytest
import zarr
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.leadline.io.test_reduce import by_matrix

from leadline.base.errors import LeadlineError
from leadline.base.progress import Cancelled
from leadline.io import reduce
from leadline.io.formats_zarr import open_zarr
from leadline.io.pyramid import open_pyramid, write_pyramid
from leadline.model.volume import Volume

Usage = namedtuple("Usage", "total used free")


def boxes(voxels, factor):
    """Means over boxes, and the place of each box's middle, in input voxels."""
    out = by_matrix(voxels, factor)
    return out, [(np.arange(m) + 0.5) * f - 0.5 for m, f in zip(out.shape, factor, strict=True)]


def noisy(shape, dtype=np.uint16, seed=0):
    return np.random.default_rng(seed).integers(1, 200, shape).astype(dtype)


@settings(deadline=None, max_examples=25)
@given(
    st.tuples(*[st.integers(12, 40)] * 3),
    st.tuples(*[st.floats(1.5, 12.0)] * 3),
    st.sampled_from([None, (1, 99, 99), (5, 7, 8), (99, 99, 1), (99, 2, 99), (99, 99, 99)]),
    st.sampled_from(["uint8", "uint16", "int16", "float32"]),
    st.sampled_from(["C", "F"]),
)
def test_levels_are_box_means_in_their_places(tmp_path_factory, shape, voxel_um, chunk, dtype, order):
    """Every level equals an independent box mean (to the rounding of 16 bit levels), and lies where its boxes do."""
    voxels = np.asarray(noisy(shape, dtype), order=order)
    volume = Volume(voxels, voxel_um, "PIR", origin_um=(5.0, 0, -3.0), chunk=chunk)
    folder = tmp_path_factory.mktemp("p") / "a.zarr"
    before, reduce.BLOCK_BYTES = reduce.BLOCK_BYTES, 4000
    try:
        write_pyramid(volume, folder, "k", (10.0, 13.0, 25.0))
    finally:
        reduce.BLOCK_BYTES = before
    for level in open_pyramid(folder, "k"):
        wanted, middles = boxes(voxels, level.voxel_um / volume.voxel_um)
        assert level.shape == wanted.shape
        assert level.data.dtype == (dtype if "16" in dtype else np.float32)
        off = 0.5 if "16" in dtype else 0.0
        np.testing.assert_allclose(level.array(), wanted, rtol=3e-5, atol=off + 0.01)
        first = [middle[0] for middle in middles] * volume.voxel_um + volume.origin_um
        np.testing.assert_allclose(level.origin_um, first, atol=1e-6)


def test_a_level_that_is_a_multiple_of_another_is_the_same_mean(tmp_path):
    """50 um comes from 25 um: the same as from the stack, to half a grey value more."""
    voxels = noisy((40, 60, 70))
    write_pyramid(Volume(voxels, (5, 5, 5), "PIR"), tmp_path / "a", "k", (10.0, 25.0, 50.0))
    ten, twentyfive, fifty = open_pyramid(tmp_path / "a", "k")
    assert [list(v.voxel_um) for v in (ten, twentyfive, fifty)] == [[10] * 3, [25] * 3, [50] * 3]
    assert fifty.origin_um.tolist() == [22.5] * 3
    np.testing.assert_allclose(fifty.array(), boxes(voxels, (10, 10, 10))[0], atol=1.0)


def test_a_bright_spot_stays_where_it_is(tmp_path):
    """The centre of mass of a blurred spot, in um, is the same at every level to a fiftieth of its voxel."""
    grid = np.stack(
        np.meshgrid(*(np.arange(n) * v for n, v in zip((60, 90, 90), (5, 4, 4), strict=True)), indexing="ij")
    )
    place = np.array([171.3, 140.8, 203.1])
    spot = 30000 * np.exp(-((grid - place[:, None, None, None]) ** 2).sum(axis=0) / (2 * 30.0**2))
    write_pyramid(Volume(spot.astype(np.uint16), (5, 4, 4), "RAS"), tmp_path / "a", "k", (10.0, 25.0, 50.0))
    for level in open_pyramid(tmp_path / "a", "k"):
        values = level.array().astype(float)
        index = np.array(
            [(values.sum(axis=tuple({0, 1, 2} - {k})) * np.arange(n)).sum() for k, n in enumerate(level.shape)]
        )
        centre = level.points(index / values.sum())
        assert np.abs(centre - place).max() < level.voxel_um[0] / 50


def test_other_tools_see_an_ome_zarr_with_units_and_directions(tmp_path):
    """The metadata are those of OME-NGFF 0.5, and say of themselves what the stack is."""
    write_pyramid(Volume(noisy((30, 40, 50)), (5, 5, 5), "ASL"), tmp_path / "a", "k", (10.0, 25.0))
    attributes = zarr.open_group(tmp_path / "a", mode="r").attrs["ome"]
    scales = attributes["multiscales"][0]
    assert attributes["version"] == "0.5"
    assert [axis["unit"] for axis in scales["axes"]] == ["micrometer"] * 3
    assert scales["datasets"][1]["coordinateTransformations"] == [
        {"type": "scale", "scale": [25.0] * 3},
        {"type": "translation", "translation": [10.0] * 3},
    ]
    image = open_zarr(tmp_path / "a", 0)
    assert image.letters == ("A", "S", "L")
    assert image.voxel_um == (10, 10, 10)
    assert zarr.open_array(tmp_path / "a" / "0", mode="r").metadata.dimension_names == ("z", "y", "x")


@pytest.mark.parametrize("dtype", ["uint8", ">u2", "float32", "uint32"])
@pytest.mark.parametrize("chunk", [(1, 50, 60), (8, 16, 16)])
def test_the_whole_stack_is_kept_as_it_is(tmp_path, dtype, chunk, monkeypatch):
    monkeypatch.setattr(reduce, "BLOCK_BYTES", 20_000)
    voxels = noisy((33, 50, 60)).astype(dtype)
    write_pyramid(Volume(voxels, (5, 5, 5), "PIR", chunk=chunk), tmp_path / "a", "k", (10.0,), keep_full=True)
    full, ten = open_pyramid(tmp_path / "a", "k")
    np.testing.assert_array_equal(full.array(), voxels)
    assert full.origin_um.tolist() == [0, 0, 0]
    np.testing.assert_allclose(ten.array(), boxes(voxels, (2, 2, 2))[0], atol=0.51)


class Watched:
    """Voxels that note the planes that are read, and may break off."""

    def __init__(self, voxels, stop_at=None):
        self.voxels, self.shape, self.dtype, self.stop_at = voxels, voxels.shape, voxels.dtype, stop_at
        self.planes = set()

    def __getitem__(self, key):
        if self.stop_at is not None and key[0].stop > self.stop_at:
            raise Cancelled
        self.planes.update(range(key[0].start, key[0].stop))
        return self.voxels[key]


def test_what_is_done_is_not_done_again_after_a_stop(tmp_path, monkeypatch):
    monkeypatch.setattr(reduce, "BLOCK_BYTES", 1)
    voxels = noisy((400, 20, 20))
    whole, first = Volume(voxels, (3, 5, 5), "PIR"), Watched(voxels, stop_at=300)
    write_pyramid(whole, tmp_path / "whole", "k", (10.0, 25.0))
    with pytest.raises(Cancelled):
        write_pyramid(Volume(first, (3, 5, 5), "PIR"), tmp_path / "a", "k", (10.0, 25.0))
    assert open_pyramid(tmp_path / "a", "k") == ()
    again = Watched(voxels)
    write_pyramid(Volume(again, (3, 5, 5), "PIR"), tmp_path / "a", "k", (10.0, 25.0))
    assert 150 < min(again.planes) < 300
    for one, two in zip(open_pyramid(tmp_path / "a", "k"), open_pyramid(tmp_path / "whole", "k"), strict=True):
        np.testing.assert_array_equal(one.array(), two.array())
    assert {p.name for p in tmp_path.iterdir()} == {"a", "whole"}


SLOW = """
import sys, time
from pathlib import Path
import numpy as np
from leadline.io import reduce
from leadline.io.pyramid import write_pyramid
from leadline.model.volume import Volume
reduce.BLOCK_BYTES = 1
class Slow:
    shape, dtype = (400, 20, 20), np.dtype(np.uint16)
    def __getitem__(self, key):
        time.sleep(0.01)
        return np.load(sys.argv[2])[key]
write_pyramid(Volume(Slow(), (3, 5, 5), "PIR", chunk=(4, 20, 20)), Path(sys.argv[1]), "k", (10.0, 25.0), keep_full=True)
"""


def test_a_killed_run_goes_on_and_gives_the_same_bytes(tmp_path, monkeypatch):
    voxels = noisy((400, 20, 20))
    np.save(tmp_path / "v.npy", voxels)
    child = subprocess.Popen([sys.executable, "-c", SLOW, str(tmp_path / "a"), str(tmp_path / "v.npy")])
    state = tmp_path / "a.unfinished" / "state.json"
    for _ in range(600):
        if state.is_file() and '"2": 0' not in state.read_text():
            break
        assert child.poll() is None
        time.sleep(0.05)
    os.kill(child.pid, signal.SIGKILL)
    child.wait()
    assert not (tmp_path / "a").exists()
    monkeypatch.setattr(reduce, "BLOCK_BYTES", 1)
    again = Watched(voxels)
    make = lambda data: Volume(data, (3, 5, 5), "PIR", chunk=(4, 20, 20))  # noqa: E731
    write_pyramid(make(again), tmp_path / "a", "k", (10.0, 25.0), keep_full=True)
    assert min(again.planes) > 0
    write_pyramid(make(voxels), tmp_path / "whole", "k", (10.0, 25.0), keep_full=True)
    for one, two in zip(open_pyramid(tmp_path / "a", "k"), open_pyramid(tmp_path / "whole", "k"), strict=True):
        np.testing.assert_array_equal(one.array(), two.array())


def test_another_stack_makes_the_old_copy_go(tmp_path):
    one, two = (Volume(noisy((20, 20, 20), seed=s), (5, 5, 5), "PIR") for s in (1, 2))
    write_pyramid(one, tmp_path / "a", "one", (10.0,))
    write_pyramid(two, tmp_path / "a", "two", (10.0,))
    assert open_pyramid(tmp_path / "a", "one") == ()
    np.testing.assert_allclose(
        open_pyramid(tmp_path / "a", "two")[0].array(), boxes(two.array(), (2, 2, 2))[0], atol=0.51
    )


def test_a_disk_that_is_too_small_is_said_before_anything_is_written(tmp_path, monkeypatch):
    monkeypatch.setattr(shutil, "disk_usage", lambda place: Usage(10**9, 10**9, 10**6))
    with pytest.raises(LeadlineError, match=r"needs up to 0\.07 GB, 0\.00 GB are free\. Free space"):
        write_pyramid(Volume(noisy((60, 60, 60)), (5, 5, 5), "PIR"), tmp_path / "a", "k", (10.0,))
    assert list(tmp_path.iterdir()) == []


def test_a_disk_that_fills_is_an_error_that_keeps_what_is_done(tmp_path, monkeypatch):
    def full(self, key, value):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(zarr.Array, "__setitem__", full)
    with pytest.raises(LeadlineError, match="the disk is full"):
        write_pyramid(Volume(noisy((60, 60, 60)), (5, 5, 5), "PIR"), tmp_path / "a", "k", (10.0,))
    assert (tmp_path / "a.unfinished").is_dir()


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_values_that_are_not_finite_are_refused(tmp_path, bad):
    voxels = noisy((30, 30, 30), np.float32)
    voxels[20, 11, 4] = bad
    with pytest.raises(LeadlineError, match=r"not finite .* near voxel \(20, 10, 4\)"):
        write_pyramid(Volume(voxels, (5, 5, 5), "PIR"), tmp_path / "a", "k", (10.0,))


def test_an_empty_stack_is_refused(tmp_path):
    with pytest.raises(LeadlineError, match="the stack is empty: every voxel is 7"):
        write_pyramid(Volume(np.full((9, 9, 9), 7, np.uint8), (5, 5, 5), "PIR"), tmp_path / "a", "k", (10.0,))


def test_progress_counts_every_block_once(tmp_path):
    class Counter:
        total, done = 0.0, 0.0

        def begin(self, label, total):
            self.total = self.total or total

        def step(self, amount=1.0):
            self.done += amount

        def say(self, message): ...

    counter = Counter()
    write_pyramid(Volume(noisy((30, 30, 30)), (5, 5, 5), "PIR"), tmp_path / "a", "k", (10.0,), progress=counter)
    assert counter.done == counter.total > 0

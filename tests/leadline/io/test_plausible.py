"""Small files that promise much: refused by their headers, or unpacked no further than they promise."""

import bz2
import gzip
import io
import json

import numpy as np
import pytest

from leadline.base.errors import LeadlineError
from leadline.io.stacks import open_image

SPACE = 'space: left-posterior-superior\nspace directions: (8,0,0) (0,8,0) (0,0,8)\nspace units: "um" "um" "um"\n'


def nrrd(path, sizes, encoding, packed):
    head = f"NRRD0005\ntype: uint8\ndimension: 3\nsizes: {' '.join(map(str, sizes))}\nencoding: {encoding}\n{SPACE}\n"
    path.write_bytes(head.encode() + packed)
    return path


def test_a_zarr_folder_of_metadata_alone_is_no_brain(tmp_path):
    import zarr

    zarr.create_array(str(tmp_path / "a.zarr"), shape=(40000, 40000, 40000), chunks=(64, 64, 64), dtype="u2")
    with pytest.raises(LeadlineError, match=r"promises 1\.28e\+05 GB of voxels \(40000 x 40000 x 40000\)"):
        open_image(tmp_path / "a.zarr")


@pytest.mark.parametrize(("encoding", "pack"), [("gzip", gzip.compress), ("bzip2", bz2.compress)])
def test_a_packed_bomb_is_unpacked_no_further_than_its_header_says(tmp_path, encoding, pack, monkeypatch):
    """64 MiB in a file of some kB, of which the header promises 27 bytes."""
    written = []
    monkeypatch.setattr("tempfile.TemporaryFile", lambda: Counting(written))
    path = nrrd(tmp_path / "a.nrrd", (3, 3, 3), encoding, pack(bytes(2**26)))
    assert path.stat().st_size < 100_000
    image = open_image(path)
    assert not np.asarray(image.levels[0].data[:, :, :]).any()
    assert sum(written) == 27


class Counting(io.FileIO):
    """A temporary file that counts what is written to it."""

    def __init__(self, written):
        import os
        import tempfile

        handle, name = tempfile.mkstemp()
        os.unlink(name)
        super().__init__(handle, "w+")
        self.written = written

    def write(self, data):
        self.written.append(len(data))
        return super().write(data)


def test_a_header_that_promises_a_thousand_times_its_file_is_refused(tmp_path):
    path = nrrd(tmp_path / "a.nrrd", (100_000, 100_000, 1000), "gzip", gzip.compress(bytes(2**20)))
    with pytest.raises(LeadlineError):
        open_image(path)


@pytest.mark.parametrize("big", [False, True])
def test_planes_of_a_tiff_that_point_back_are_refused(tmp_path, big):
    import tifffile

    path = tmp_path / "a.tif"
    tifffile.imwrite(path, np.zeros((4, 8, 8), np.uint8), photometric="minisblack", bigtiff=big, metadata=None)
    with tifffile.TiffFile(path) as file:
        first, last = file.pages[0].offset, file.pages[3].offset
    data = bytearray(path.read_bytes())
    size, entry, link = (8, 20, 8) if big else (2, 12, 4)
    at = last + size + int.from_bytes(data[last : last + size], "little") * entry
    data[at : at + link] = first.to_bytes(link, "little")
    path.write_bytes(data)
    with pytest.raises(LeadlineError, match="point back to one another"):
        open_image(path)


def test_a_sparse_array_of_modest_size_is_read(tmp_path):
    import zarr

    array = zarr.create_array(str(tmp_path / "a.zarr"), shape=(300, 300, 300), chunks=(50, 50, 50), dtype="u2")
    array[:50, :50, :50] = 7
    assert json.loads((tmp_path / "a.zarr" / "zarr.json").read_text())["shape"] == [300] * 3
    assert open_image(tmp_path / "a.zarr").levels[0].data[0:2, 0:2, 0:2].max() == 7

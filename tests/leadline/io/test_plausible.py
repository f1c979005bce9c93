"""Small files that promise much: refused by their headers, or unpacked no further than they promise."""

import bz2
import gzip
import io
import json
import os

import numpy as np
import pytest
from tests.faults.killing import in_child
from tests.fuzz.judge import bound_memory

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


def held_in_a_gigabyte(read):
    """Do something in a child that may grow by a gigabyte; what it said."""
    told, tell = os.pipe()

    def work():
        bound_memory()
        try:
            read()
        except LeadlineError as error:
            os.write(tell, str(error).encode())

    assert in_child(work) == 0
    os.close(tell)
    with os.fdopen(told) as said:
        return said.read()


def chunks_grown(folder, version, sharded):
    """A Zarr array of eight voxels an axis whose metadata are then made to say chunks of 30000 an axis."""
    import zarr

    shards = {"shards": (8, 8, 8)} if sharded else {}
    array = zarr.create_array(str(folder), shape=(8, 8, 8), chunks=(4, 4, 4), dtype="u2", zarr_format=version, **shards)
    array[:] = 1
    meta = folder / (".zarray" if version == 2 else "zarr.json")
    said = json.loads(meta.read_text())
    if version == 2:
        said["chunks"] = [30000] * 3
    else:
        said["chunk_grid"]["configuration"]["chunk_shape"] = [30000] * 3
    meta.write_text(json.dumps(said))
    return folder


@pytest.mark.parametrize(("version", "sharded"), [(2, False), (3, False), (3, True)])
def test_chunks_that_no_file_can_fill_are_refused(tmp_path, version, sharded):
    path = chunks_grown(tmp_path / "a.zarr", version, sharded)
    said = held_in_a_gigabyte(lambda: np.asarray(open_image(path).levels[0].data[:2, :2, :2]))
    assert "packs its voxels in pieces of 30000 x 30000 x 30000 (5.4e+04 GB)" in said


@pytest.mark.parametrize("folder", [False, True])
def test_tiles_that_no_file_can_fill_are_refused(tmp_path, folder):
    import tifffile

    path = tmp_path / "a_1.tif"
    voxels = np.zeros((64, 64) if folder else (3, 64, 64), np.uint8)
    tifffile.imwrite(path, voxels, photometric="minisblack", metadata=None, compression="zlib", tile=(16, 16))
    with tifffile.TiffFile(path, mode="r+") as file:
        for page in file.pages:
            for name in ("TileWidth", "TileLength"):
                page.tags[name].overwrite(32768)
    if folder:
        (tmp_path / "a_2.tif").write_bytes(path.read_bytes())
    said = held_in_a_gigabyte(lambda: np.asarray(open_image(tmp_path if folder else path).levels[0].data[:1, :2, :2]))
    assert "packs its voxels in pieces of" in said
    assert "32768 x 32768" in said


@pytest.mark.parametrize("version", [2, 3])
def test_a_chunk_that_unpacks_to_more_than_it_may_is_an_error(tmp_path, version):
    """128 bytes belong there; the file holds 2 GiB of zeros."""
    import numcodecs
    import zarr
    from zarr.codecs import GzipCodec

    from leadline.io.reduce import reduce_to
    from leadline.model.volume import Volume

    packer = {"compressors": [numcodecs.GZip() if version == 2 else GzipCodec()]}
    array = zarr.create_array(
        str(tmp_path / "a.zarr"), shape=(8, 8, 8), chunks=(4, 4, 4), dtype="u2", zarr_format=version, **packer
    )
    array[:] = np.arange(512).reshape(8, 8, 8)
    bomb = gzip.compress(bytes(2**28)) * 8
    name = "0.0.0" if version == 2 else "c/0/0/0"
    (tmp_path / "a.zarr" / name).write_bytes(bomb)
    data = open_image(tmp_path / "a.zarr").levels[0].data
    assert "cannot be read" in held_in_a_gigabyte(lambda: data[:2, :2, :2])
    assert "cannot be read" in held_in_a_gigabyte(lambda: reduce_to(Volume(data, np.full(3, 8.0), "PIR"), 16.0))


def test_a_sparse_array_of_modest_size_is_read(tmp_path):
    import zarr

    array = zarr.create_array(str(tmp_path / "a.zarr"), shape=(300, 300, 300), chunks=(50, 50, 50), dtype="u2")
    array[:50, :50, :50] = 7
    assert json.loads((tmp_path / "a.zarr" / "zarr.json").read_text())["shape"] == [300] * 3
    assert open_image(tmp_path / "a.zarr").levels[0].data[0:2, 0:2, 0:2].max() == 7

"""Voxels handed over piece by piece: the same as on slicing, whatever they are packed by; damage is an error."""

import numpy as np
import pytest
import tifffile
import zarr

from leadline.base.errors import LeadlineError
from leadline.io.formats_zarr import open_zarr
from leadline.io.stacks import open_stack

SHAPE = (21, 37, 50)
VOXELS = np.random.default_rng(4).integers(0, 900, SHAPE).astype(np.uint16)
BOX = (slice(4, 19), slice(0, 37), slice(10, 50))
CODECS = {
    "zstd": zarr.codecs.ZstdCodec(),
    "blosc": zarr.codecs.BloscCodec(cname="lz4", shuffle="bitshuffle"),
    "gzip": zarr.codecs.GzipCodec(),
    "bare": None,
}


def joined(data, box):
    """The box put together from pieces; every voxel is handed over once."""
    out = np.zeros([s.stop - s.start for s in box], data.dtype)
    seen = np.zeros(out.shape, int)
    for start, piece in data.pieces(box):
        at = tuple(slice(a - s.start, a - s.start + n) for a, s, n in zip(start, box, piece.shape, strict=True))
        out[at] = piece
        seen[at] += 1
    assert (seen == 1).all()
    return out


def write(path, dtype="u2", channels=0, zarr_format=3, **how):
    """One level in chunks of 8 x 10 x 16, the first planes of it empty."""
    voxels = VOXELS.astype(dtype)
    voxels[:8, :10, :16] = 0
    shape, chunks = SHAPE, (8, 10, 16)
    if channels:
        voxels, shape, chunks = np.stack([voxels + k for k in range(channels)]), (channels, *SHAPE), (2, *chunks)
        how |= {"shards": (2, *how["shards"])} if "shards" in how else {}
    group = zarr.open_group(path, mode="w", zarr_format=zarr_format)
    array = group.create_array("0", shape=shape, chunks=chunks, dtype=dtype, fill_value=0, **how)
    array[:] = voxels
    names = ("c", "z", "y", "x") if channels else ("z", "y", "x")
    axes = [{"name": n, "type": "channel" if n == "c" else "space"} for n in names]
    step = {"type": "scale", "scale": [1.0] * len(names)}
    scales = [{"version": "0.4", "axes": axes, "datasets": [{"path": "0", "coordinateTransformations": [step]}]}]
    group.attrs.update({"multiscales": scales} if zarr_format == 2 else {"ome": {"multiscales": scales}})
    return voxels


@pytest.mark.parametrize("shards", [{}, {"shards": (16, 20, 32)}], ids=["chunks", "shards"])
@pytest.mark.parametrize("codec", CODECS)
def test_chunks_of_zarr_3(tmp_path, codec, shards):
    voxels = write(tmp_path / "a", compressors=CODECS[codec], **shards)
    data = open_zarr(tmp_path / "a", 0).levels[0].data
    if codec == "bare" and shards:  # left to zarr, which checks the sum of the index
        assert data.pieces(None) is None
        return
    np.testing.assert_array_equal(joined(data, BOX), voxels[BOX])
    np.testing.assert_array_equal(joined(data, BOX), data[BOX])


@pytest.mark.parametrize("dtype", ["<u2", ">u2", "<f4", "u1"])
@pytest.mark.parametrize("channels", [0, 3])
def test_other_types_channels_and_zarr_2(tmp_path, dtype, channels):
    for folder, how in (("three", {"shards": (16, 20, 32)}), ("two", {"zarr_format": 2})):
        voxels = write(tmp_path / folder, dtype, channels, **how)
        data = open_zarr(tmp_path / folder, 2 if channels else 0).levels[0].data
        np.testing.assert_array_equal(joined(data, BOX), (voxels[2] if channels else voxels)[BOX])


def test_what_is_not_understood_is_left_to_zarr(tmp_path):
    for k, how in enumerate(
        [
            {"order": "F", "zarr_format": 2},
            {"filters": [zarr.codecs.TransposeCodec(order=(2, 1, 0))]},
            {"compressors": [zarr.codecs.GzipCodec(), zarr.codecs.ZstdCodec()]},
        ]
    ):
        voxels = write(tmp_path / str(k), **how)
        data = open_zarr(tmp_path / str(k), 0).levels[0].data
        assert data.pieces(None) is None
        np.testing.assert_array_equal(data[BOX], voxels[BOX])


@pytest.mark.parametrize("shards", [{}, {"shards": (16, 20, 32)}], ids=["chunks", "shards"])
@pytest.mark.parametrize("codec", ["zstd", "blosc", "gzip", "bare"])
def test_a_damaged_chunk_is_an_error(tmp_path, codec, shards):
    if codec == "bare" and shards:
        return
    write(tmp_path / "a", compressors=CODECS[codec], **shards)
    data = open_zarr(tmp_path / "a", 0).levels[0].data
    file = max((tmp_path / "a" / "0" / "c").rglob("*"), key=lambda f: f.stat().st_size if f.is_file() else 0)
    good = file.read_bytes()
    spoilt = [good[:-7], good[: len(good) // 2], b"", good[:3]]
    if shards:  # the index at the end points behind the file
        spoilt.append(good[:-100] + bytes(b ^ 0x40 for b in good[-100:]))
    for bad in spoilt:
        file.write_bytes(bad)
        with pytest.raises(LeadlineError, match="cannot be read"):
            joined(data, (slice(0, 21), slice(0, 37), slice(0, 50)))


LAYOUTS = {
    "one strip": {"compression": "zlib", "rowsperstrip": 37},
    "strips": {"compression": "zstd", "rowsperstrip": 5, "predictor": True},
    "rows": {"compression": "lzw", "rowsperstrip": 1},
    "tiles": {"compression": "zlib", "tile": (16, 32)},
    "bare": {},
    "bare strips": {"rowsperstrip": 4},
    "other bytes": {"byteorder": ">"},
}


@pytest.mark.parametrize("piece_bytes", [200, 1000, 2**20])
@pytest.mark.parametrize("layout", LAYOUTS)
def test_planes(tmp_path, layout, piece_bytes, monkeypatch):
    monkeypatch.setattr("leadline.io.formats_planes.PIECE_BYTES", piece_bytes)
    for k, plane in enumerate(VOXELS):
        tifffile.imwrite(tmp_path / f"p{k:03d}.tif", plane, **LAYOUTS[layout])
    data = open_stack(tmp_path, voxel_um=(1, 1, 1), code="PIR").finest.data
    box = (slice(3, 9), slice(0, 37), slice(0, 50))
    np.testing.assert_array_equal(joined(data, box), VOXELS[box])


@pytest.mark.parametrize("planar", ["contig", "separate", "pages"])
def test_planes_of_several_channels(tmp_path, planar):
    for k, plane in enumerate(VOXELS[:4]):
        both = np.stack([plane, plane + 1], 0 if planar != "contig" else -1)
        how = {} if planar == "pages" else {"photometric": "minisblack", "planarconfig": planar}
        tifffile.imwrite(tmp_path / f"p{k}.tif", both, compression="zlib", **how)
    data = open_stack(tmp_path, channel=1, voxel_um=(1, 1, 1), code="PIR").finest.data
    box = (slice(1, 4), slice(0, 37), slice(0, 50))
    np.testing.assert_array_equal(joined(data, box), VOXELS[box] + 1)


def test_a_plane_that_is_spoilt_or_changed_is_an_error(tmp_path):
    for k, plane in enumerate(VOXELS[:4]):
        tifffile.imwrite(tmp_path / f"p{k}.tif", plane, compression="zlib", rowsperstrip=5)
    data = open_stack(tmp_path, voxel_um=(1, 1, 1), code="PIR").finest.data
    box = (slice(0, 4), slice(0, 37), slice(0, 50))
    file = tmp_path / "p2.tif"
    good = bytearray(file.read_bytes())
    good[len(good) // 2 : len(good) // 2 + 40] = b"\x55" * 40
    file.write_bytes(good)
    with pytest.raises(LeadlineError, match=r"cannot be read"):
        joined(data, box)
    tifffile.imwrite(file, VOXELS[2][:30], compression="zlib")
    with pytest.raises(LeadlineError, match=r"cannot be read"):
        joined(data, box)

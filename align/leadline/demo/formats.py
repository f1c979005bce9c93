"""Writers for image files of the invented brain, by the published formats and not by this project's readers.

References
----------
OME-NGFF 0.4 and 0.5; OME-TIFF; NIfTI-1 (world axes R, A, S); NRRD (space left-posterior-superior).
"""

from __future__ import annotations

import gzip
import uuid
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

_RAS = {"R": (1, 0, 0), "L": (-1, 0, 0), "A": (0, 1, 0), "P": (0, -1, 0), "S": (0, 0, 1), "I": (0, 0, -1)}
SUFFIX = {
    "ome-zarr-0.4": ".ome.zarr",
    "ome-zarr-0.5": ".ome.zarr",
    "ome-tiff": ".ome.tif",
    "tiff-folder": "",
    "tiff": ".tif",
    "nifti": ".nii.gz",
    "nrrd": ".nrrd",
}
CARRIES_VOXEL = frozenset({"ome-zarr-0.4", "ome-zarr-0.5", "ome-tiff", "nifti", "nrrd"})
CARRIES_CODE = frozenset({"nifti", "nrrd"})


def write_image(path: Path, channels: Sequence[AnyArray], voxel_um: FloatArray, code: str, kind: str) -> None:
    """Write stored arrays of three axes, one a channel, as ``kind`` of :data:`SUFFIX`."""
    voxel = [float(v) for v in voxel_um]
    path.parent.mkdir(parents=True, exist_ok=True)
    if kind.startswith("ome-zarr"):
        _write_zarr(path, channels, voxel, kind.removeprefix("ome-zarr-"))
    elif kind == "ome-tiff":
        _write_ome_tiff(path, channels, voxel)
    elif kind == "tiff-folder":
        _write_planes(path, channels[0])
    elif kind == "tiff":
        _write_tiff(path, channels[0])
    elif kind == "nifti":
        _write_nifti(path, channels[0], voxel, code)
    else:
        _write_nrrd(path, channels[0], voxel, code)


def _write_zarr(path: Path, channels: Sequence[AnyArray], voxel: list[float], version: str) -> None:
    """Two resolutions; a channel axis only where there are several channels."""
    import zarr

    several = len(channels) > 1
    names = ["c", "z", "y", "x"] if several else ["z", "y", "x"]
    group = zarr.open_group(str(path), mode="w", zarr_format=2 if version == "0.4" else 3)
    datasets = []
    for level in range(2):
        images = [image if level == 0 else _halved(image) for image in channels]
        data = np.stack(images) if several else np.ascontiguousarray(images[0])
        extra: dict[str, Any] = {"dimension_names": names} if version == "0.5" else {}
        chunks = (1,) * several + tuple(min(64, n) for n in images[0].shape)
        array = group.create_array(str(level), shape=data.shape, dtype=data.dtype, chunks=chunks, **extra)
        array[:] = data
        scale = [1.0] * several + [v * 2**level for v in voxel]
        moved = [0.0] * several + [v * (2**level - 1) / 2 for v in voxel]
        steps = [{"type": "scale", "scale": scale}, {"type": "translation", "translation": moved}]
        datasets.append({"path": str(level), "coordinateTransformations": steps[: 1 + level]})
    axes = [{"name": n, "type": "channel"} if n == "c" else _space_axis(n) for n in names]
    scales = {"version": version, "name": "invented", "axes": axes, "datasets": datasets}
    if version == "0.4":
        group.attrs["multiscales"] = [scales]
    else:
        scales.pop("version")
        group.attrs["ome"] = {"version": version, "multiscales": [scales]}


def _space_axis(name: str) -> dict[str, str]:
    return {"name": name, "type": "space", "unit": "micrometer"}


def _halved(image: AnyArray) -> AnyArray:
    """Mean of 2 x 2 x 2 voxels, a rest at the far edges left out."""
    a, b, c = (n // 2 for n in image.shape)
    blocks = image[: 2 * a, : 2 * b, : 2 * c].reshape(a, 2, b, 2, c, 2)
    return np.asarray(blocks.mean(axis=(1, 3, 5), dtype=np.float32).round().astype(image.dtype))


def _write_ome_tiff(path: Path, channels: Sequence[AnyArray], voxel: list[float]) -> None:
    import tifffile

    metadata: dict[str, Any] = {"axes": "CZYX" if len(channels) > 1 else "ZYX"}
    for axis, size in zip("ZYX", voxel, strict=True):
        metadata |= {f"PhysicalSize{axis}": size, f"PhysicalSize{axis}Unit": "µm"}
    data = np.stack(channels) if len(channels) > 1 else np.ascontiguousarray(channels[0])
    # The library would draw a random one, and the same brain must be the same bytes.
    metadata["UUID"] = f"urn:uuid:{uuid.uuid5(uuid.NAMESPACE_OID, path.name)}"
    tifffile.imwrite(path, data, ome=True, photometric="minisblack", metadata=metadata)


def _write_planes(path: Path, image: AnyArray) -> None:
    """One file a plane; numbers without leading zeros, as many microscopes write them."""
    import tifffile

    path.mkdir(parents=True, exist_ok=True)
    for k, plane in enumerate(image):
        tifffile.imwrite(path / f"plane_{k}.tif", np.ascontiguousarray(plane), photometric="minisblack", metadata=None)


def _write_tiff(path: Path, image: AnyArray) -> None:
    import tifffile

    tifffile.imwrite(path, np.ascontiguousarray(image), photometric="minisblack", metadata=None)


def _write_nifti(path: Path, image: AnyArray, voxel: list[float], code: str) -> None:
    import nibabel

    affine = np.eye(4)
    affine[:3, :3] = np.column_stack([np.multiply(_RAS[c], v / 1000) for c, v in zip(code, voxel, strict=True)])
    made = nibabel.Nifti1Image(np.asarray(image), affine, dtype=image.dtype)
    made.header.set_xyzt_units("mm")
    nibabel.save(made, path)


def _write_nrrd(path: Path, image: AnyArray, voxel: list[float], code: str) -> None:
    """By hand: the usual library stamps the date into the file, and the same brain must be the same bytes."""
    lps = np.diag([-1, -1, 1])
    steps = [lps @ np.multiply(_RAS[c], v / 1000) for c, v in zip(code, voxel, strict=True)]
    packed = image.dtype.itemsize > 2
    header = [
        "NRRD0004",
        f"type: {image.dtype.name.replace('float32', 'float')}",
        "dimension: 3",
        "space: left-posterior-superior",
        "sizes: " + " ".join(map(str, image.shape)),
        "space directions: " + " ".join("(" + ",".join(f"{x:.9g}" for x in step) + ")" for step in steps),
        "kinds: domain domain domain",
        "endian: little",
        "encoding: " + ("gzip" if packed else "raw"),
        'space units: "mm" "mm" "mm"',
        "space origin: (0,0,0)",
    ]
    body = np.asarray(image).tobytes(order="F")
    path.write_bytes(
        "\n".join([*header, "", ""]).encode("ascii") + (gzip.compress(body, 1, mtime=0) if packed else body)
    )

"""Damaged files: whatever bytes are wrong, a reader reads on or says so in one message; nothing else escapes."""

import json
import random

import numpy as np
import pytest
import tifffile
from tests.good_brain import probe, write_good_brain
from tests.leadline.io.test_stacks import SIZE, VOXELS, write_nifti, write_nrrd, write_zarr

from leadline.base.errors import LeadlineError
from leadline.io.atlases import read_atlas
from leadline.io.probes import read_probe
from leadline.io.stacks import open_stack

ROUNDS = 40


def write_stack(folder, name):
    """Write a stack of the format that the name says."""
    path = folder / name
    if name == "ij.tif":
        said = {"axes": "ZYX", "spacing": 8.0, "unit": "um"}
        tifffile.imwrite(path, VOXELS, imagej=True, resolution=(0.25, 0.2), metadata=said)
    elif ".tif" in name:
        tifffile.imwrite(path, VOXELS, metadata=SIZE, compression="zlib" if name.startswith("packed") else None)
    elif ".nii" in name:
        write_nifti(path)
    elif name.endswith(".nrrd"):
        write_nrrd(path, encoding="gzip" if name.startswith("packed") else "raw")
    else:
        write_zarr(path, fmt=int(name[1]))
    return path


def spoilt(good, rng):
    """Bytes with up to five wrong ones, most near the beginning, or cut short."""
    data = bytearray(good)
    for _ in range(rng.choice([1, 1, 2, 5])):
        at = rng.randrange(min(len(data), rng.choice([60, 400, 4000, 10**9])))
        data[at] = rng.choice([0, 255, rng.randrange(256), data[at] ^ (1 << rng.randrange(8))])
    return bytes(data[: rng.randrange(len(data))] if rng.random() < 0.2 else data)


def refused(file, read, seed):
    """How often ``read`` refuses the file, spoilt in ``ROUNDS`` ways; any other error escapes and fails the test."""
    rng, good, count = random.Random(seed), file.read_bytes(), 0
    for _ in range(ROUNDS):
        file.write_bytes(spoilt(good, rng))
        try:
            read()
        except LeadlineError:
            count += 1
    file.write_bytes(good)
    return count


@pytest.mark.parametrize(
    "name",
    ["a.ome.tif", "packed.ome.tif", "ij.tif", "a.nii", "a.nii.gz", "a.nrrd", "packed.nrrd", "v2.zarr", "v3.zarr"],
)
def test_a_damaged_stack_is_read_or_refused(tmp_path, name):
    path = write_stack(tmp_path, name)

    def read():
        finest = open_stack(path, voxel_um=(8, 5, 4), code="PIR").finest
        if np.prod(finest.shape) < 1e7:
            finest.array()

    files = sorted(p for p in path.rglob("*") if p.is_file()) if path.is_dir() else [path]
    metadata = [file for file in files if file.suffix == ".json" or file.name.startswith(".z")] or files
    assert sum(refused(file, read, seed) for seed, file in enumerate((*metadata, files[0]))) > 0


@pytest.mark.parametrize("name", ["atlas.toml", "structures.csv", "labels.nrrd", "template.nrrd"])
def test_a_damaged_atlas_is_read_or_refused(tmp_path, name):
    write_good_brain(tmp_path)
    assert refused(tmp_path / "atlas" / name, lambda: read_atlas(tmp_path / "atlas"), 1) > 0


def test_a_damaged_probe_is_read_or_refused(tmp_path):
    (tmp_path / "p.json").write_text(json.dumps(probe()))
    assert refused(tmp_path / "p.json", lambda: read_probe(tmp_path / "p.json"), 1) > 0

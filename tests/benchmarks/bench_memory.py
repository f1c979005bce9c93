"""A whole run on 1, 4 and 16 times the data: the most memory held at once, and how the cost grows.

The data are a demo brain whose voxels are repeated (as if imaged finer) and whose recording is repeated (as if it had
lasted longer); the grids on which Leadline works stay those of the settings. The settings are the same for all sizes.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from tempfile import TemporaryDirectory

from tests.benchmarks.frame import Row, in_child

REPEATS = {1: (1, 1, 1), 4: (1, 2, 2), 16: (4, 2, 2)}
VOXEL_UM = (32.0, 25.0, 25.0)
SECONDS = 64.0


def rows(voxel_um: tuple[float, float, float] = VOXEL_UM, seconds: float = SECONDS) -> Iterator[Row]:
    """A row for each amount of data."""
    with TemporaryDirectory() as name:
        base = f"{name}/1"
        in_child(write, folder=base, voxel_um=voxel_um, seconds=seconds)
        for times, repeats in REPEATS.items():
            folder = f"{name}/{times}"
            gigabytes = in_child(repeated, base=base, folder=folder, repeats=repeats).answer
            cost = in_child(run, folder=folder)
            yield Row(
                "whole run", round(gigabytes, 3), "GB", cost.cpu_s, peak_mb=cost.peak_mb, note=f"{times}x the data"
            )


def write(folder: str, voxel_um: list[float], seconds: float) -> None:
    """The demo brain; tracing on a grid that its own voxels already give."""
    from leadline.demo.recipe import Recipe
    from leadline.demo.write import write_brain

    a, b, c = voxel_um
    write_brain(Path(folder), Recipe(1, voxel_um=(a, b, c), seconds=seconds, penetrations=1))
    file = Path(folder) / "brain.toml"
    file.write_text(file.read_text() + f"\n[settings.trace]\nresolution_um = {max(voxel_um)}\n")


def repeated(base: str, folder: str, repeats: list[int]) -> float:
    """The brain of ``base`` with more data, in ``folder``; returns the size of stack and recording in GB, unpacked."""
    import shutil

    source, goal = Path(base), Path(folder)
    if source != goal:
        shutil.copytree(source, goal, ignore=shutil.ignore_patterns("stack", "out", ".leadline", "truth"))
        for stack in (source / "stack").iterdir():
            (goal / "stack").mkdir(exist_ok=True)
            _repeat_stack(stack, goal / "stack" / stack.name, repeats)
        times = repeats[0] * repeats[1] * repeats[2]
        for lfp in source.glob("*.bin"):
            (goal / lfp.name).write_bytes(b"")
            with (goal / lfp.name).open("ab") as more:
                for _ in range(times):
                    more.write(lfp.read_bytes())
    return _bytes(goal) / 1e9


def _repeat_stack(source: Path, goal: Path, repeats: list[int]) -> None:
    """The finest level of an OME-Zarr file with every voxel repeated, slab by slab."""
    import numpy as np
    import zarr

    old = zarr.open_group(str(source), mode="r")
    levels = dict(old.attrs["ome"])
    scales = dict(levels["multiscales"][0])
    steps = scales["datasets"][0]["coordinateTransformations"]
    size = [s / r for s, r in zip(steps[0]["scale"], repeats, strict=True)]
    scales["datasets"] = [{"path": "0", "coordinateTransformations": [{"type": "scale", "scale": size}]}]
    voxels = old["0"]
    shape = tuple(n * r for n, r in zip(voxels.shape, repeats, strict=True))
    group = zarr.open_group(str(goal), mode="w")
    array = group.create_array(
        "0", shape=shape, dtype=voxels.dtype, chunks=(64, 64, 64), dimension_names=voxels.metadata.dimension_names
    )
    for start in range(0, voxels.shape[0], 16):
        slab = voxels[start : start + 16]
        for axis, times in enumerate(repeats):
            slab = np.repeat(slab, times, axis=axis)
        array[start * repeats[0] : start * repeats[0] + slab.shape[0]] = slab
    group.attrs["ome"] = levels | {"multiscales": [scales]}


def _bytes(folder: Path) -> int:
    """Voxels and samples, in bytes as they are read."""
    import numpy as np
    import zarr

    stacks = [zarr.open_group(str(stack), mode="r")["0"] for stack in (folder / "stack").iterdir()]
    samples = sum(lfp.stat().st_size for lfp in folder.glob("*.bin"))
    return samples + sum(int(np.prod(a.shape)) * a.dtype.itemsize for a in stacks)


def run(folder: str) -> None:
    """Run every stage."""
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.run import run as run_brain

    run_brain(read_brain(Path(folder)))

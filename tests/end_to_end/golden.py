"""The golden run: a tiny invented brain whose channel table is kept in ``fixtures/golden``.

A library or a change that moves channels shows in the test as a table of what moved. When the change is meant, run

    python -m tests.end_to_end.golden

look at the difference, and say in the CHANGELOG by how much channels move.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from importlib import import_module
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pandas as pd

ROOT = Path(__file__).parents[2]
TABLE = ROOT / "fixtures" / "golden" / "channels.csv"
TEXT = ("penetration", "shank", "channel", "contact_id", "in_brain", "basis")
NAMES = ("region", "coarse_region", "layer", "tissue")
# How far a number may move before somebody should look: a small part of the error that the table itself states.
TOLERANCE = {
    "x_um": 0.01, "y_um": 0.01, "tip_distance_um": 0.01, "track_depth_um": 8.0, "track_depth_sd_um": 4.0, "ap_um": 8.0,
    "dv_um": 8.0, "ml_um": 8.0, "p_region": 0.08, "p_coarse": 0.08, "boundary_um": 12.0,
}  # fmt: skip
SAME_NAMES = 0.9  # channels on a border may change sides


def write_inputs(folder: Path, chunk: tuple[int, int, int] = (64, 64, 64)) -> None:
    """The tiny brain, its dye track to be found, its stack in chunks of ``chunk`` voxels."""
    import tifffile
    import zarr
    from tests.good_brain import STACK_UM, write_good_brain

    file = write_good_brain(folder)
    for name in ("auto", "dye"):
        voxels = tifffile.imread(folder / f"{name}.ome.tif")
        (folder / f"{name}.ome.tif").unlink()
        group = zarr.open_group(str(folder / f"{name}.ome.zarr"), mode="w")
        group.create_array("0", data=voxels, chunks=chunk, dimension_names="zyx")
        scale = {"type": "scale", "scale": [STACK_UM] * 3}
        axes = [{"name": axis, "type": "space", "unit": "micrometer"} for axis in "zyx"]
        levels = {"axes": axes, "datasets": [{"path": "0", "coordinateTransformations": [scale]}]}
        group.attrs["ome"] = {"version": "0.5", "multiscales": [levels]}
    text = file.read_text().split("[[anchor]]")[0].replace('points = "a_points.csv"\n', "")
    file.write_text(text.replace(".ome.tif", ".ome.zarr"))


def run_fresh(folder: Path, *, threads: int = 1, constants: dict[str, object] | None = None) -> None:
    """Run the brain in a new process; ``constants`` : full names of sizes of blocks, and what to set them to."""
    names = ("OMP", "OPENBLAS", "MKL", "NUMBA")
    environment = os.environ | {f"{name}_NUM_THREADS": str(threads) for name in names}
    environment |= {"ITK_GLOBAL_DEFAULT_NUMBER_OF_THREADS": str(threads)}
    command = [sys.executable, "-m", "tests.end_to_end.golden", str(folder), json.dumps(constants or {})]
    told = subprocess.run(command, cwd=ROOT, env=environment, capture_output=True, text=True, check=False)
    assert told.returncode == 0, told.stderr


def difference(kept: pd.DataFrame, found: pd.DataFrame) -> str:
    """What moved beyond its tolerance, in words; empty where nothing did."""
    if len(kept) != len(found):
        return f"{len(found)} channels instead of {len(kept)}"
    lines = [f"column {name} is gone" for name in kept.columns if name not in found.columns]
    for name in (*TEXT, *NAMES, *TOLERANCE):
        if name not in kept.columns or name not in found.columns:
            continue
        a, b = kept[name], found[name]
        if name in TOLERANCE:
            moved = (pd.to_numeric(b) - pd.to_numeric(a)).abs()
            off = ~((moved <= TOLERANCE[name]) | (a.eq("") & b.eq("")))
            said = f"at most {moved.max():.3g}, {TOLERANCE[name]:g} allowed" if off.any() else ""
        else:
            off = a.ne(b)
            allowed = 1 - SAME_NAMES if name in NAMES else 0.0
            said = f"{off.mean():.0%} differ, {allowed:.0%} allowed" if off.mean() > allowed else ""
        if said:
            first = int(np.argmax(off.to_numpy()))
            lines.append(
                f"{name}: {int(off.sum())} of {len(a)} channels ({said}); first channel {kept['channel'][first]} of "
                f"{kept['penetration'][first]}: {a[first]} was, {b[first]} is"
            )
    return "\n".join(lines)


def read(path: Path) -> pd.DataFrame:
    """A channel table, every cell as it is written."""
    return pd.read_csv(path, dtype=str, keep_default_na=False)


def _run(folder: str, constants: str) -> None:
    for name, value in json.loads(constants).items():
        module, _, constant = name.rpartition(".")
        owner = import_module(module)
        assert hasattr(owner, constant), f"{name} is gone: name what took its place"
        setattr(owner, constant, tuple(value) if isinstance(value, list) else value)
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.run import run

    run(read_brain(Path(folder)))


def renew() -> None:
    """Write the golden table anew and print what moved."""
    with TemporaryDirectory() as name:
        folder = Path(name)
        write_inputs(folder)
        run_fresh(folder)
        found = read(folder / "out" / "channels.csv")
        if TABLE.is_file():
            print(difference(read(TABLE), found) or "nothing moved beyond its tolerance")
        TABLE.parent.mkdir(parents=True, exist_ok=True)
        shutil.copy(folder / "out" / "channels.csv", TABLE)


if __name__ == "__main__":
    renew() if len(sys.argv) == 1 else _run(*sys.argv[1:])

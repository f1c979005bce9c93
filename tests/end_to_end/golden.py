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


# What a structure of the tiny brain does: power in five bands in dB over the others, spikes a second of a site.
BANDS_HZ = ((0.7, 4.0), (5.0, 10.0), (30.0, 90.0), (140.0, 220.0), (300.0, 1000.0))
SOUNDS = {
    0: (-6, -6, -8, -9, -9, 0.0), 614454277: (-1, -1, -3, -2, -4, 0.3), 12: (0, -1, 0, -1, -1, 3.0),
    51: (-2, -2, 0, -1, 3, 8.0), 13: (3, -1, 1, 2, 4, 9.0), 14: (2, -1, 0, 0, 0, 4.0), 21: (-1, 1, -3, -2, -4, 0.2),
    4294967295: (0, 1, 1, 8, 5, 12.0), 32: (1, 5, 4, 0, 1, 3.0), 50: (-2, -2, -1, -1, 2, 5.0),
}  # fmt: skip
SECONDS, DEEPER_UM = 30, 90.0


def write_speaking_recording(folder: Path) -> None:
    """Traces and spikes that speak of the structures, of a probe that sat a little deeper than its dye."""
    from tests.good_brain import N_CONTACTS, N_TRACES, SAMPLING_HZ, entry_um, label_at, tip_um

    rng = np.random.default_rng(11)
    tip_distance_um = 100.0 + 50.0 * np.arange(N_CONTACTS)
    way = (tip_um() - entry_um()) / np.linalg.norm(tip_um() - entry_um())
    label = label_at(tip_um() + (DEEPER_UM - tip_distance_um)[:, None] * way)
    sound = np.array([SOUNDS[int(k)] for k in label])
    n = int(SECONDS * SAMPLING_HZ)
    hz = np.fft.rfftfreq(n, 1 / SAMPLING_HZ)
    uv = np.zeros((N_CONTACTS, n), np.float32)
    for (low, high), db in zip(BANDS_HZ, sound.T, strict=False):
        noise = np.zeros((N_CONTACTS, hz.size), complex)
        band = (hz >= low) & (hz < high)
        size = (N_CONTACTS, int(band.sum()))
        own, shared = (rng.normal(size=size) + 1j * rng.normal(size=size) for _ in range(2))
        noise[:, band] = own + (shared + np.roll(shared, 1, axis=0) + np.roll(shared, -1, axis=0))
        wave = np.fft.irfft(noise, n, axis=1)
        uv += (120.0 / low**0.5 * 10 ** (db / 20))[:, None] * wave / wave.std(axis=1, keepdims=True)
    traces = np.zeros((n, N_TRACES), "<i2")
    traces[:, :N_CONTACTS] = np.clip(np.rint(uv.T / 0.5), -32768, 32767)
    traces.tofile(folder / "a_lfp.bin")
    rows = [(t, f"u{2 * k + u}", tip_distance_um[k], 40 + 6 * u + 4 * sound[k, 4])
            for k in range(N_CONTACTS) for u in range(2)
            for t in rng.uniform(0, SECONDS, rng.poisson(sound[k, 5] * SECONDS / 2))]  # fmt: skip
    lines = [f"{t:.5f},{unit},{tip:g},{size:.1f}" for t, unit, tip, size in sorted(rows)]
    (folder / "a_spikes.csv").write_text("time_s,unit_id,tip_distance_um,amplitude_uv\n" + "\n".join(lines) + "\n")


def write_inputs(folder: Path, chunk: tuple[int, int, int] = (64, 64, 64)) -> None:
    """The tiny brain with a recording that says much, its dye track to be found, its stack in chunks of ``chunk``."""
    import tifffile
    import zarr
    from tests.good_brain import STACK_UM, write_good_brain

    file = write_good_brain(folder)
    write_speaking_recording(folder)
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

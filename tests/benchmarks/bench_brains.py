"""Eight brains on two workers beside the same eight one after the other, each a demo brain's files in its own folder.

On a machine that others use, walls say nothing of ours: there the throughput is what the CPU seconds allow, two cores'
worth of work done at once with all that side-by-side running adds. Which of the two was measured stands in the row.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from tempfile import TemporaryDirectory

from tests.benchmarks.frame import ROOT, Row, in_child

BRAINS, WORKERS = 8, 2
BUSY_LOAD = 0.5


def rows() -> Iterator[Row]:
    """One row: seconds on two workers against seconds one after the other."""
    with TemporaryDirectory() as name:
        in_child(write, folder=name, brains=BRAINS)
        busy = os.getloadavg()[0] > BUSY_LOAD
        in_child(run, folder=name, workers=1, which="brain-[0]")  # compiled code warm for both
        alone, together = (in_child(run, folder=name, workers=n) for n in (1, WORKERS))
    ours = together.cpu_s / WORKERS if busy else together.wall_s
    theirs = alone.cpu_s if busy else alone.wall_s
    yield Row(
        "8 brains on 2 workers",
        BRAINS,
        "brains",
        ours,
        theirs,
        bar=1.7,
        at_least=True,
        reference="one after the other",
        peak_mb=together.peak_mb,
        measured="CPU s / 2" if busy else "s",
        note=f"walls {together.wall_s:.0f} s against {alone.wall_s:.0f} s; CPU {together.cpu_s:.0f} s against "
        f"{alone.cpu_s:.0f} s" + ("; the machine was busy, so the ratio is that of CPU seconds" if busy else ""),
    )


def write(folder: str, brains: int) -> None:
    """Demo brains of different seeds at a coarse voxel, with recordings of half a minute."""
    from leadline.demo.recipe import Recipe
    from leadline.demo.write import write_brain

    for seed in range(brains):
        recipe = Recipe(seed + 1, voxel_um=(60.0, 50.0, 50.0), seconds=32.0, n_points=100)
        write_brain(Path(folder) / f"brain-{seed}", recipe)


def run(folder: str, workers: int, which: str = "*") -> list[str]:
    """Run brains afresh by the command line; returns their states."""
    for brain in Path(folder).iterdir():
        for name in ("out", ".leadline"):
            shutil.rmtree(brain / name, ignore_errors=True)
    code = "from leadline.cli.main import main; main()"
    command = [sys.executable, "-c", code, "run", f"{folder}/{which}", "--workers", str(workers), "--json"]
    told = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    if told.returncode:
        raise RuntimeError(told.stderr)
    return [brain["state"] for brain in json.loads(told.stdout)["brains"]]

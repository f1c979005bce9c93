"""How well points are carried, over whole invented brains; prints a table.

    python tests/studies/registration.py [SEEDS] [KIND]

Seeds 11 to 18 are those that the method was tuned on; the default, 101 and on, are held out. CPU seconds are of the
registration alone, compiled code warm or not as it comes.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from leadline.demo import recipe as kinds
from leadline.demo.anatomy import make_atlas
from leadline.demo.recipe import Recipe
from leadline.demo.sample import draw, draw_points
from leadline.demo.write import invent
from leadline.model.frames import from_pir
from leadline.model.settings import RegisterSettings
from leadline.model.volume import Volume
from leadline.registration.stage import register

KINDS: dict[str, Callable[[Recipe], Recipe]] = {
    "smooth": lambda r: r,
    "fine": kinds.fine,
    "hard": kinds.hard,
    "hard and fine": lambda r: kinds.fine(kinds.hard(r)),
    "tilt 25": lambda r: replace(kinds.hard(r), tilt_deg=25.0),
}
CODES = ("PIR", "RAS", "LIP", "IAR", "SPL")
VOXEL_UM = (45.0, 38.0, 38.0)


def main(seeds: str = "101,102", only: str = "") -> None:
    """Print a line for every brain: errors in um, and the true error of a coordinate over the estimated one."""
    print(f"{'kind':16}{'seed':>5}{'code':>5}{'median':>8}{'p95':>7}{'p99':>7}{'rms 1':>7}{'stated':>8}", end="")
    print(f"{'ratio':>7}{'min J':>7}{'CPU s':>7}")
    for seed in map(int, seeds.split(",")):
        for k, (name, change) in enumerate(KINDS.items()):
            if only in name:
                _line(name, seed, CODES[(k + seed) % len(CODES)], change)


def _line(name: str, seed: int, code: str, change: Callable[[Recipe], Recipe]) -> None:
    recipe = change(Recipe(seed, stack_code=code, voxel_um=VOXEL_UM, seconds=0.0))
    brain, atlas = invent(recipe), make_atlas(recipe)
    images = draw(recipe, brain.chart, brain.frame, brain.penetrations)
    background, dye = (Volume(np.ascontiguousarray(from_pir(i, code)), np.asarray(VOXEL_UM), code) for i in images)
    stack_um, atlas_um, _ = draw_points(recipe, brain.chart, brain.frame)
    start = time.process_time()
    found = register(background, atlas.template, atlas.labels, settings=RegisterSettings(), dye=dye)
    seconds = time.process_time() - start
    miss = found.stack_to_atlas(stack_um) - atlas_um
    p50, p95, p99 = np.percentile(np.linalg.norm(miss, axis=1), [50, 95, 99])
    rms = float(np.sqrt(np.mean(miss**2)))
    print(f"{name:16}{seed:5d}{code:>5}{p50:8.1f}{p95:7.1f}{p99:7.1f}{rms:7.1f}{found.error_um:8.1f}", end="")
    print(f"{rms / found.error_um:7.2f}{found.quality['jacobian_min']:7.2f}{seconds:7.1f}", flush=True)
    for sentence in found.warnings:
        print("   ", sentence)


if __name__ == "__main__":
    main(*sys.argv[1:])

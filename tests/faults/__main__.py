"""Kills everything that writes, at seeded moments, and looks what stands: ``python -m tests.faults [SCENE=KILLS ...]``.

Three in four kills come at a look at the file system, spread evenly over all of them; the others by the clock.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
from tests.faults.killing import killed_after, killed_at
from tests.faults.scenes import SCENES, Scene

KILLS = {"run": 220, "rerun": 60, "accept": 220, "edits": 220, "export": 220, "in-place": 60, "others": 60}
BY_THE_CLOCK = 4


def kill(scene: Scene, kills: int, seed: int) -> list[str]:
    """All faults found in so many kills of a scene."""
    rng = np.random.default_rng(seed)
    moments, seconds = scene.moments(), scene.cpu_s
    found = []
    for number in range(kills):
        share = (number + rng.random()) / kills
        by_clock = number % BY_THE_CLOCK == BY_THE_CLOCK - 1
        if by_clock:
            where = f"after {share * seconds:.3f} s"
            faults = scene.cut(lambda work, share=share: killed_after(share * seconds, work))  # type: ignore[misc]
        else:
            moment = 1 + int(share * moments)
            where = f"at look {moment} of {moments}"
            faults = scene.cut(lambda work, moment=moment: killed_at(moment, work))  # type: ignore[misc]
        found += [f"{scene.name}, killed {where}: {fault}" for fault in faults]
        if number % 20 == 19:
            print(f"  {scene.name}: {number + 1} kills so far, {len(found)} faults", file=sys.stderr, flush=True)
    return found


def main(words: list[str]) -> int:
    """Kill every scene asked for; 1 where something was half or lost."""
    wanted = {w.partition("=")[0]: int(w.partition("=")[2] or KILLS[w.partition("=")[0]]) for w in words} or KILLS
    faults = []
    for name, kills in wanted.items():
        start = time.monotonic()
        with TemporaryDirectory() as scratch:
            SCENES[name].prepare(Path(scratch))
            found = kill(SCENES[name], kills, seed=1)
        print(f"{name:<9} {kills:>4} kills, {len(found)} faults, {time.monotonic() - start:.0f} s", flush=True)
        for fault in found:
            print(f"  {fault}", flush=True)
        faults += found
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))

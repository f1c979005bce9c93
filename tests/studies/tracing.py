"""How well tracks are traced, over many invented pieces of brain; prints a table.

    python tests/studies/tracing.py [dev|held-out] [SEEDS]

Development seeds (1, 2, ...) are those that the method was tuned on; held-out seeds (1001, 1002, ...) were only
scored. Times are CPU seconds of the tracing alone, compiled code warm.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "leadline" / "tracing"))

import phantom
from scoring import Score, score

from leadline.tracing.find import trace

FIRST_SEED = {"dev": 1, "held-out": 1001}
COARSE = phantom.Conditions()
FAMILIES = {
    "36 um, singles": COARSE,
    "36 um, 4 shanks of 250": replace(COARSE, shanks=4, singles=1),
    "45 um, 4 shanks of 250": replace(COARSE, shanks=4, singles=1, voxel_um=(45.0, 45.0, 45.0), code="LSA"),
    "35 um, 4 shanks of 150": replace(COARSE, shanks=4, singles=1, pitch_um=150.0, sigma_um=(18.0, 35.0)),
    "36 um, faint": replace(COARSE, signal=(3.0, 6.0), gaps=2),
    "36 um, many vessels": replace(COARSE, vessels=40, pools=6, bubbles=6, gaps=2),
    "40x25x25 um": replace(COARSE, voxel_um=(40.0, 25.0, 25.0), code="IAR", shanks=2),
    "12 um": replace(COARSE, voxel_um=(12.0, 12.0, 12.0), size_um=(3200.0, 3600.0, 3200.0), shanks=2, singles=1),
}


def main(which: str = "dev", seeds: str = "6", only: str = "") -> None:
    """Print a line for every family and one for all of them."""
    print(f"{which} seeds; um; sd ratio: rms of error over stated sd")
    print(f"{'family':26}{'tracks':>7}{'missed':>7}{'false':>6}  {'line med':>8}{'p95':>6}{'worst':>7}  ", end="")
    print(f"{'entry':>6}{'p90':>5}{'ratio':>6}  {'end':>5}{'p90':>6}{'bias':>6}{'ratio':>6}  {'CPU s':>6}")
    total: list[Score] = []
    for name, conditions in FAMILIES.items():
        if only not in name:
            continue
        scores, seconds = [], []
        for k in range(int(seeds)):
            made = phantom.make(FIRST_SEED[which] + k, conditions)
            start = time.process_time()
            found = trace(made.dye, made.background)
            seconds.append(time.process_time() - start)
            scores.append(score(made.tracks, found, seed=FIRST_SEED[which] + k))
        _line(name, scores, float(np.median(seconds)))
        total += scores
    _line("all", total, float("nan"))


def _line(name: str, scores: list[Score], seconds: float) -> None:
    rows = [m for s in scores for m in s.matched]
    gaps = np.concatenate([m.gap_um for m in rows])
    entry, end = (np.array([getattr(m, f"{k}_error_um") for m in rows]) for k in ("entry", "end"))
    entry_sd, end_sd = (np.array([getattr(m, f"{k}_sd_um") for m in rows]) for k in ("entry", "end"))
    worst = max(float(np.quantile(m.gap_um, 0.95)) for m in rows)
    print(f"{name:26}{len(rows) + sum(len(s.missed) for s in scores):7d}", end="")
    print(f"{sum(len(s.missed) for s in scores):7d}{sum(len(s.invented) for s in scores):6d}  ", end="")
    print(f"{np.median(gaps):8.1f}{np.quantile(gaps, 0.95):6.1f}{worst:7.1f}  ", end="")
    print(
        f"{np.median(np.abs(entry)):6.1f}{np.quantile(np.abs(entry), 0.9):5.0f}{_rms(entry / entry_sd):6.2f}  ", end=""
    )
    print(f"{np.median(np.abs(end)):5.1f}{np.quantile(np.abs(end), 0.9):6.0f}{np.median(end):+6.0f}", end="")
    print(f"{_rms(end / end_sd):6.2f}  {seconds:6.1f}", flush=True)
    for s in scores:
        for text in s.remarks:
            print("      ", text)


def _rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values**2)))


if __name__ == "__main__":
    main(*sys.argv[1:])

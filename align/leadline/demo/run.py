"""``leadline demo``: write an invented brain, run every stage on its files, say how close it came."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline.base.progress import SILENT, Progress
from leadline.demo.recipe import Recipe
from leadline.demo.score import as_text, score
from leadline.demo.write import write_brain

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path


def run_demo(
    folder: Path, seed: int, progress: Progress = SILENT, run: Callable[[Path, Progress], object] | None = None
) -> str:
    """Write the demo brain of ``seed`` into ``folder``, run it, and return the score as text.

    ``run`` : runs every stage on the brain of a folder; by default the pipeline. It is given the folder of
    ``brain.toml`` alone, which names no truth.
    """
    write_brain(folder, Recipe(seed=seed), progress)
    (run or _run)(folder, progress)
    return f"{folder}: what was found, beside the truth\n" + as_text(score(folder))


def _run(folder: Path, progress: Progress) -> None:
    from leadline.io.brainfile import read_brain
    from leadline.pipeline import run

    run.run(read_brain(folder), progress=progress)

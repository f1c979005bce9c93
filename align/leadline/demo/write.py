"""The invented brain on disk: everything that a user has, and the truth beside it, which no stage reads."""

from __future__ import annotations

import csv
import json
import shutil
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import write_text
from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.demo import formats
from leadline.demo.anatomy import make_atlas
from leadline.demo.probes import as_json
from leadline.demo.recipe import Recipe
from leadline.demo.recording import TRUTH_COLUMNS, channel_rows, write_recording
from leadline.demo.sample import draw, draw_points
from leadline.demo.tracks import TruePenetration, make_penetrations
from leadline.demo.warp import Frame, TrueMap, make_map
from leadline.model.frames import ATLAS_COLUMNS, STACK_COLUMNS, from_pir

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence
    from pathlib import Path

    from leadline.model.atlas import Atlas

RECIPE_FILE = "truth/recipe.json"
_STEP_UM = 20.0


@dataclass(frozen=True, slots=True, eq=False)
class Invented:
    """A brain made but not yet written: its map, its stack's frame, its penetrations."""

    recipe: Recipe
    chart: TrueMap
    frame: Frame
    penetrations: tuple[TruePenetration, ...]


def invent(recipe: Recipe) -> Invented:
    """Draw everything that is random about a brain but its voxels and samples."""
    penetrations = make_penetrations(recipe)
    chart, frame = make_map(recipe, tuple(pen.chord_um for pen in penetrations))
    return Invented(recipe, chart, frame, penetrations)


def write_brain(folder: Path, recipe: Recipe, progress: Progress = SILENT) -> None:
    """Write an invented brain: ``brain.toml`` and all it names, and ``truth/``; nothing where it is there already.

    Raises LeadlineError when ``folder`` holds something else.
    """
    said = json.dumps(asdict(recipe), indent=1) + "\n"
    mark = folder / RECIPE_FILE
    if mark.is_file() and mark.read_text("utf-8") == said:
        progress.say("the invented brain is there already; its files are kept")
        return
    if folder.exists() and any(folder.iterdir()) and not mark.parent.is_dir():
        raise LeadlineError(
            "is not empty and holds no invented brain", where=str(folder), mend="Name a folder that is new or empty"
        )
    for name in ("truth", "stack", "atlas"):
        shutil.rmtree(folder / name, ignore_errors=True)
    mark.parent.mkdir(parents=True)
    brain = invent(recipe)
    write_atlas(folder / "atlas", make_atlas(recipe), recipe)
    _write_stack(folder, brain, progress)
    for pen in brain.penetrations:
        write_text(folder / f"{pen.name.lower()}_probe.json", json.dumps(as_json(pen.design), indent=1))
    recordings = {
        pen.name: write_recording(folder, recipe, pen, progress) for pen in brain.penetrations if recipe.seconds
    }
    write_truth(folder / "truth", brain)
    write_text(folder / "brain.toml", brain_toml(brain, recordings))
    write_text(mark, said)


def write_atlas(folder: Path, atlas: Atlas, recipe: Recipe) -> None:
    """An atlas folder in the format and orientation of the recipe."""
    import tomli_w

    kind, code = recipe.atlas_format, recipe.atlas_code
    suffix = formats.SUFFIX[kind]
    for name, volume in (("labels", atlas.labels), ("template", atlas.template)):
        stored = from_pir(volume.array(), code)
        formats.write_image(folder / (name + suffix), [stored], volume.voxel_um, code, kind)
    stated: dict[str, Any] = {
        "name": atlas.name,
        "citation": atlas.citation,
        "licence": atlas.licence,
        "labels": "labels" + suffix,
        "template": "template" + suffix,
        "structures": "structures.csv",
        "bregma_um": [float(x) for x in atlas.bregma_um] if atlas.bregma_um is not None else [],
    }
    if kind not in formats.CARRIES_CODE:
        stated |= {"orientation": code, "voxel_um": [recipe.atlas_voxel_um] * 3}
    write_text(folder / "atlas.toml", tomli_w.dumps(stated))
    columns = ("id", "acronym", "name", "parent_id", "colour", "layer", "coarse", "tissue")
    rows = [
        (s.id, s.acronym, s.name, s.parent_id or "", s.colour, s.layer, str(s.coarse).lower(), s.tissue)
        for s in atlas.structures.rows
    ]
    write_csv(folder / "structures.csv", columns, rows)


def _write_stack(folder: Path, brain: Invented, progress: Progress) -> None:
    recipe, frame = brain.recipe, brain.frame
    images = draw(recipe, brain.chart, frame, brain.penetrations, progress)
    stored = [from_pir(image, frame.code) for image in images]
    names = stack_names(recipe)
    for name, channels in (
        [(names[0], stored)] if recipe.one_file else [(names[k], [image]) for k, image in enumerate(stored)]
    ):
        formats.write_image(folder / name, channels, frame.voxel_um, frame.code, recipe.stack_format)


def stack_names(recipe: Recipe) -> tuple[str, str]:
    """Paths of background and dye, relative to the brain's folder."""
    suffix = formats.SUFFIX[recipe.stack_format]
    return ("stack/both" + suffix,) * 2 if recipe.one_file else ("stack/background" + suffix, "stack/dye" + suffix)


def brain_toml(brain: Invented, recordings: dict[str, dict[str, Any]]) -> str:
    """The text of ``brain.toml``, with a recording's table for each penetration that has one; it names no truth."""
    import tomli_w

    recipe = brain.recipe
    background, dye = stack_names(recipe)
    stack: dict[str, Any] = {"background": background, "dye": dye}
    if recipe.one_file:
        stack |= {"background_channel": 0, "dye_channel": 1}
    if recipe.stack_format not in formats.CARRIES_VOXEL:
        stack["voxel_um"] = list(recipe.voxel_um)
    if recipe.stack_format not in formats.CARRIES_CODE:
        stack["orientation"] = recipe.stack_code
    return tomli_w.dumps(
        {
            "format": 1,
            "brain": {"name": f"invented-{recipe.seed:02d}"},
            "atlas": {"path": "atlas"},
            "stack": stack,
            "penetration": [
                _penetration(recipe, pen) | ({"recording": [recordings[pen.name]]} if pen.name in recordings else {})
                for pen in brain.penetrations
            ],
        }
    )


def _penetration(recipe: Recipe, pen: TruePenetration) -> dict[str, Any]:
    """What the experimenter wrote down: a planned entry some hundred um off, a manipulator's depth."""
    rng = np.random.default_rng([recipe.seed, 70, ord(pen.name[0])])
    entry = pen.chord_um[0] + rng.normal(0, 150, 3)
    table: dict[str, Any] = {
        "name": pen.name,
        "probe": f"{pen.name.lower()}_probe.json",
        "tip_offset_um": pen.design.probe.tip_offset_um,
        "entry_near_um": [float(round(x)) for x in entry],
    }
    if pen.name == "A":
        table["inserted_um"] = float(round(pen.shanks[0].law.inverse(0.0) + rng.normal(0, 90)))
    if pen.shank_toward:
        table["shank_toward"] = pen.shank_toward
    return table


def write_truth(folder: Path, brain: Invented) -> None:
    """``points.csv``, ``tracks.csv`` and ``channels.csv``."""
    stack, atlas, border = draw_points(brain.recipe, brain.chart, brain.frame)
    rows = (
        [*(f"{x:.3f}" for x in (*s, *a)), str(bool(b)).lower()] for s, a, b in zip(stack, atlas, border, strict=True)
    )
    write_csv(folder / "points.csv", (*STACK_COLUMNS, *ATLAS_COLUMNS, "near_border"), rows)
    columns = ("penetration", "shank", "order", *STACK_COLUMNS, *ATLAS_COLUMNS, "track_depth_um", "mark")
    write_csv(folder / "tracks.csv", columns, _track_rows(brain))
    channels = (row for pen in brain.penetrations for row in channel_rows(brain.recipe, pen))
    write_csv(folder / "channels.csv", TRUTH_COLUMNS, channels)


def _track_rows(brain: Invented) -> Iterable[Sequence[object]]:
    """Every 20 um from the entry to the deeper of dye end and tip; those three places are marked."""
    for pen in brain.penetrations:
        for shank in pen.shanks:
            deepest = max(shank.tip_depth_um, shank.dye_end_um)
            marks = {0.0: "entry", shank.dye_end_um: "dye_end", shank.tip_depth_um: "tip"}
            depth = np.unique([*np.arange(0.0, deepest, _STEP_UM), *marks])
            atlas = shank.at(depth)
            stack = brain.frame.from_pir(brain.chart.inverse(atlas))
            for k, d in enumerate(depth):
                numbers = [f"{x:.2f}" for x in (*stack[k], *atlas[k], d)]
                yield (pen.name, shank.number, k, *numbers, marks.get(float(d), ""))


def write_csv(path: Path, columns: Sequence[str], rows: Iterable[Sequence[object]]) -> None:
    """A table as text."""
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("w", encoding="utf-8", newline="") as handle:
        writer = csv.writer(handle, lineterminator="\n")
        writer.writerow(columns)
        writer.writerows(rows)


def _main() -> None:
    """A tool of the team: write one invented brain."""
    import argparse
    from dataclasses import replace
    from pathlib import Path

    from leadline.demo import recipe as knobs

    parser = argparse.ArgumentParser(description="Write an invented brain with known truth.")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--seed", type=int, default=1)
    for flag in ("hard", "rough", "fine", "small", "one-file"):
        parser.add_argument("--" + flag, action="store_true")
    parser.add_argument("--code", default="IAR")
    parser.add_argument("--format", default="ome-zarr-0.5", choices=knobs.STACK_FORMATS)
    parser.add_argument("--voxel", type=float, nargs=3)
    parser.add_argument("--set", nargs="*", default=[], metavar="KNOB=NUMBER", help="any number of the recipe")
    said = parser.parse_args()
    recipe = Recipe(said.seed, stack_code=said.code, stack_format=said.format, one_file=said.one_file)
    for flag in ("small", "hard", "fine", "rough"):
        if getattr(said, flag):
            recipe = getattr(knobs, flag)(recipe)
    if said.voxel:
        recipe = replace(recipe, voxel_um=tuple(said.voxel))
    for pair in said.set:
        name, value = pair.split("=")
        recipe = replace(recipe, **{name: type(getattr(recipe, name))(value)})
    write_brain(said.folder, recipe)


if __name__ == "__main__":
    _main()

"""``leadline learn``: a lab's own knowledge from its finished brains."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline.base.atomic import write_text
from leadline.base.errors import LeadlineError
from leadline.pipeline import products

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from leadline.anchoring.learn import FinishedShank, Learned
    from leadline.model.brain import Brain

COLUMNS = ("tip_distance_um", "track_depth_um", "region_id", "p_region")


def learn_from(brains: Sequence[Brain], to: Path) -> Learned:
    """Learn from brains that have been run, and write the knowledge file ``to``.

    Raises LeadlineError when a brain has not been run, or there is too little to learn from.
    """
    from leadline.anchoring.learn import learn

    learned = learn([shank for brain in brains for shank in _finished(brain)])
    write_text(to, learned.text)
    return learned


def _finished(brain: Brain) -> list[FinishedShank]:
    import pandas as pd

    from leadline.anchoring.learn import FinishedShank
    from leadline.io.profiles import read_profile
    from leadline.pipeline.atlas_import import load_atlas

    table_file = brain.out / "channels.csv"
    if not table_file.is_file():
        raise LeadlineError("has not been run", where=str(brain.file), mend=f"Run 'leadline run {brain.folder}' first")
    table = pd.read_csv(table_file, dtype={"penetration": str}, keep_default_na=False)
    structures = load_atlas(brain.atlas).structures
    found = []
    for track in products.read_tracks(brain)[0]:
        file = products.ProfileFiles(brain, track.penetration).table
        mine = table[(table["penetration"] == track.penetration) & (table["shank"] == track.shank)]
        if not file.is_file() or mine.empty:
            continue
        rows = mine.drop_duplicates("tip_distance_um").sort_values("tip_distance_um")
        columns = (
            rows[name].to_numpy(float) for name in ("tip_distance_um", "track_depth_um", "region_id", "p_region")
        )
        tip, depth, region, sure = columns
        found.append(
            FinishedShank(
                brain=f"{brain.name} ({brain.folder})",
                structures=structures,
                profile=read_profile(file).of_shank(track.shank),
                tip_distance_um=tip,
                track_depth_um=depth,
                region_id=region.astype(int),
                p_region=sure,
                end_depth_um=track.length_um,
            )
        )
    return found

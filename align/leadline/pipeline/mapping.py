"""``leadline map``: carries points between stack and atlas, and names their regions."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline.model.frames import ATLAS_COLUMNS, STACK_COLUMNS
from leadline.pipeline.products import RegistrationFiles

if TYPE_CHECKING:
    from pathlib import Path

    import pandas as pd

    from leadline.base.arrays import FloatArray
    from leadline.model.brain import Brain


def map_points(brain: Brain, points: Path, to: str) -> pd.DataFrame:
    """The user's table with new columns appended, same rows and order.

    ``to`` = 'atlas' : from ``s0_um, s1_um, s2_um`` to ``ap_um, dv_um, ml_um, region_id, region``; 'stack' : back,
    from ``ap_um, dv_um, ml_um``. The brain must be registered.

    Raises LeadlineError when the table lacks a column or holds a cell that is no number.
    """
    from leadline.io.points import read_points
    from leadline.pipeline.atlas_import import load_atlas

    registration = RegistrationFiles(brain).read()
    if to == "stack":
        table, atlas_um = read_points(points, ATLAS_COLUMNS)
        return _with(table, STACK_COLUMNS, registration.atlas_to_stack(atlas_um))
    table, stack_um = read_points(points, STACK_COLUMNS)
    atlas_um = registration.stack_to_atlas(stack_um)
    atlas = load_atlas(brain.atlas)
    region_id = atlas.label_at(atlas_um)
    named = _with(table, ATLAS_COLUMNS, atlas_um)
    named["region_id"] = region_id
    named["region"] = [atlas.structures[int(i)].acronym for i in region_id]
    return named


def _with(table: pd.DataFrame, columns: tuple[str, ...], points_um: FloatArray) -> pd.DataFrame:
    kept = table.drop(columns=[c for c in columns if c in table.columns])
    return kept.assign(**{name: points_um[:, k].round(2) for k, name in enumerate(columns)})

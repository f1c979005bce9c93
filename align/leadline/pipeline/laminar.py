"""Cortical depth of a brain's atlas, solved once and kept beside the brain."""

from __future__ import annotations

from typing import TYPE_CHECKING
from zipfile import BadZipFile

import numpy as np

from leadline.atlas import laminar
from leadline.base.atomic import whole_file
from leadline.base.errors import LeadlineError
from leadline.base.fingerprint import fingerprint_path

if TYPE_CHECKING:
    from pathlib import Path

    import pandas as pd

    from leadline.pipeline.bench import Bench

COLUMNS = ("cortical_depth", "layer_source")


def cortical_depth(bench: Bench) -> laminar.CorticalDepth | None:
    """The cortical depth of the brain's atlas, from ``.leadline`` where it stands there for this very atlas.

    None where the atlas has no cortex between the outside and white matter.
    """
    file, mark = bench.brain.cache / "cortical_depth.npz", fingerprint_path(bench.brain.atlas)
    kept = _read(file, mark)
    if kept is None:
        try:
            kept = laminar.cortical_depth(bench.atlas)
        except LeadlineError:
            kept = laminar.CorticalDepth(np.full((1, 1, 1), np.nan, np.float32), np.ones(3), np.zeros(3))
        with whole_file(file) as part, part.open("wb") as handle:
            np.savez_compressed(
                handle, mark=np.array(mark), values=kept.values, voxel_um=kept.voxel_um, origin_um=kept.origin_um
            )
    return kept if np.isfinite(kept.values).any() else None


def with_cortical_depth(table: pd.DataFrame, bench: Bench) -> pd.DataFrame:
    """Channels or units with ``cortical_depth`` and ``layer_source`` appended, where the atlas has cortex."""
    import pandas as pd

    depth, structures = cortical_depth(bench), bench.atlas.structures
    chosen = bench.brain.settings.locate.layer_fractions
    laminar.require_chosen(chosen, structures)
    if depth is None:
        return table
    points = table[["ap_um", "dv_um", "ml_um"]].apply(pd.to_numeric).to_numpy(float)
    region = pd.to_numeric(table["region_id"]).fillna(-1).to_numpy(np.int64)
    by_atlas = [str(v) for v in table["layer"]]
    found, layers, sources = laminar.depth_columns(points, region, by_atlas, depth, structures, chosen)
    return table.assign(layer=list(layers), cortical_depth=found.round(4), layer_source=list(sources))


def without_depth(table: pd.DataFrame, bench: Bench) -> tuple[str, ...]:
    """A sentence where a table has no cortical depth though its atlas has cortex, or though layers were asked for."""
    asked = bench.brain.settings.locate.layer_fractions
    if COLUMNS[0] in table.columns or not (asked or laminar.cortex_ids(bench.atlas.structures)):
        return ()
    return (
        "no cortical_depth and no layers from it: the atlas' cortex does not lie between the outside and white matter",
    )


def _read(file: Path, mark: str) -> laminar.CorticalDepth | None:
    """What is kept, unless it is of another atlas or damaged, in which case it is solved again."""
    if not file.is_file():
        return None
    try:
        with np.load(file, allow_pickle=False) as arrays:
            if str(arrays["mark"]) != mark:
                return None
            return laminar.CorticalDepth(arrays["values"], arrays["voxel_um"], arrays["origin_um"])
    except (BadZipFile, KeyError, ValueError, OSError, EOFError):
        return None

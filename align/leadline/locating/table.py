"""The channel table and the posterior table, from located contacts."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.locating.assign import Located, probabilities
from leadline.model.channels import CHANNEL_COLUMNS, POSTERIOR_COLUMNS, STEREO_COLUMNS

if TYPE_CHECKING:
    import pandas as pd

    from leadline.base.arrays import FloatArray
    from leadline.model.atlas import Atlas
    from leadline.model.probe import Probe

NOT_LOCATED = "not located"


def channel_rows(brain: str, penetration: str, probe: Probe, atlas: Atlas, located: Located) -> pd.DataFrame:
    """Rows of ``channels.csv`` for the contacts of one shank, ``probe`` holding just those."""
    import pandas as pd

    structures = [atlas.structures[int(i)] for i in located.region_id]
    table = _contact_columns(brain, penetration, probe)
    table |= {
        "track_depth_um": located.track_depth_um.round(2),
        "track_depth_sd_um": located.track_depth_sd_um.round(2),
        "ap_um": located.atlas_um[:, 0].round(2),
        "dv_um": located.atlas_um[:, 1].round(2),
        "ml_um": located.atlas_um[:, 2].round(2),
        "region_id": located.region_id,
        "region": [s.acronym for s in structures],
        "region_name": [s.name for s in structures],
        "coarse_region": [atlas.structures.coarse(s.id).acronym for s in structures],
        "layer": [s.layer for s in structures],
        "tissue": [s.tissue for s in structures],
        "p_region": located.p_region.round(4),
        "p_coarse": located.p_coarse.round(4),
        "in_brain": located.region_id != 0,
        "boundary_um": located.boundary_um.round(2),
        "basis": list(located.basis),
    }
    frame = pd.DataFrame(table)[list(CHANNEL_COLUMNS)]
    return frame if atlas.bregma_um is None else frame.assign(**_stereotaxic(located.atlas_um, atlas.bregma_um))


def unlocated_rows(brain: str, penetration: str, probe: Probe, atlas: Atlas) -> pd.DataFrame:
    """Rows for contacts that no track places: region 'not located', which is neither outside nor unlabelled."""
    import pandas as pd

    table = _contact_columns(brain, penetration, probe)
    frame = pd.DataFrame(table)
    for column in CHANNEL_COLUMNS:
        if column not in frame:
            frame[column] = pd.NA
    frame["region"] = frame["region_name"] = frame["coarse_region"] = NOT_LOCATED
    frame["layer"] = frame["tissue"] = frame["basis"] = ""
    columns = [*CHANNEL_COLUMNS, *(STEREO_COLUMNS if atlas.bregma_um is not None else ())]
    return frame.reindex(columns=columns)


def posterior_rows(penetration: str, probe: Probe, atlas: Atlas, located: Located) -> pd.DataFrame:
    """Rows of ``posterior.parquet`` for the contacts of one shank."""
    import pandas as pd

    rows = [
        (penetration, int(probe.channel[row]), region, atlas.structures[region].acronym, round(share, 4))
        for row, region, share in probabilities(located)
    ]
    return pd.DataFrame(rows, columns=list(POSTERIOR_COLUMNS))


def _contact_columns(brain: str, penetration: str, probe: Probe) -> dict[str, object]:
    return {
        "brain": [brain] * len(probe.contact_id),
        "penetration": penetration,
        "shank": probe.shank,
        "channel": probe.channel,
        "contact_id": list(probe.contact_id),
        "x_um": probe.x_um.round(3),
        "y_um": probe.y_um.round(3),
        "tip_distance_um": probe.tip_distance_um.round(3),
    }


def _stereotaxic(atlas_um: FloatArray, bregma_um: FloatArray) -> dict[str, FloatArray]:
    """Millimetres from bregma: anterior +, right +, ventral +."""
    mm = (np.asarray(atlas_um) - bregma_um) / 1000.0
    return dict(zip(STEREO_COLUMNS, (-mm[:, 0].round(5), mm[:, 2].round(5), mm[:, 1].round(5)), strict=True))

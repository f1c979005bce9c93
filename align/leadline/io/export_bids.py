"""BIDS tables of located electrodes, after the proposal for microelectrode recordings (BEP032)."""

from __future__ import annotations

import json
import re
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd

    from leadline.model.atlas import Atlas

MISSING = "n/a"
COLUMNS: dict[str, tuple[str, dict[str, str]]] = {
    "name": ("", {"Description": "penetration and contact"}),
    "probe_name": ("penetration", {"Description": "penetration"}),
    "x": ("ap_um", {"Description": "grows posterior, atlas frame", "Units": "um"}),
    "y": ("dv_um", {"Description": "grows inferior, atlas frame", "Units": "um"}),
    "z": ("ml_um", {"Description": "grows right, atlas frame", "Units": "um"}),
    "shank_id": ("shank", {"Description": "shank of the probe"}),
    "channel": ("channel", {"Description": "trace of the recording that the contact is wired to"}),
    "location": ("region", {"Description": "structure of the atlas, acronym"}),
    "anatomical_location_id": ("region_id", {"Description": "id of the structure in the atlas"}),
    "layer": ("layer", {"Description": "cortical or hippocampal layer"}),
    "probability": ("p_region", {"Description": "probability, given all modelled error, that location is right"}),
    "track_depth_sd": ("track_depth_sd_um", {"Description": "sd of the place along the track", "Units": "um"}),
    "basis": ("basis", {"Description": "what placed the contact: histology, physiology, between or beyond anchors"}),
}


def bids_files(brain: str, channels: pd.DataFrame, atlas: Atlas, provenance: Mapping[str, str]) -> dict[str, str]:
    """File name -> content: electrodes and probes as tables with sidecars, and the coordinate system.

    Names bear the brain's name without what BIDS labels cannot hold.
    """
    stem = f"sub-{re.sub(r'[^A-Za-z0-9]', '', brain) or 'brain'}"
    electrodes = _electrodes(channels)
    sidecar: dict[str, Any] = {name: about for name, (_, about) in COLUMNS.items()}
    sidecar["LocalizationMethod"] = f"{provenance['method']}; {provenance['caution']}"
    probes = [["probe_name", "shank_count", "contact_count"]]
    for name, part in channels.groupby("penetration", sort=False):
        probes.append([str(name), str(part["shank"].nunique()), str(len(part))])
    system = {
        "MicroephysCoordinateSystem": "Other",
        "MicroephysCoordinateUnits": "um",
        "MicroephysCoordinateSystemDescription": f"Atlas '{atlas.name}': {provenance['frame']}",
        "MicroephysCoordinateProcessingDescription": f"{provenance['method']}; {provenance['caution']}",
        "AtlasCitation": atlas.citation or MISSING,
    }
    return {
        f"{stem}_electrodes.tsv": _tsv(electrodes),
        f"{stem}_electrodes.json": _json(sidecar),
        f"{stem}_probes.tsv": _tsv(probes),
        f"{stem}_coordsystem.json": _json(system),
    }


def _electrodes(channels: pd.DataFrame) -> list[list[str]]:
    names = [f"{p}_{c}" for p, c in zip(channels["penetration"], channels["contact_id"], strict=True)]
    columns = [names if not source else [_cell(v) for v in channels[source]] for source, _ in COLUMNS.values()]
    return [list(COLUMNS), *(list(row) for row in zip(*columns, strict=True))]


def _cell(value: Any) -> str:
    if value is None or value != value or value == "":
        return MISSING
    if isinstance(value, float | np.floating):
        return f"{float(value):.10g}"
    return re.sub(r"[\t\r\n]+", " ", str(value))


def _tsv(rows: list[list[str]]) -> str:
    return "".join("\t".join(row) + "\n" for row in rows)


def _json(value: Mapping[str, Any]) -> str:
    return json.dumps(value, indent=2, ensure_ascii=False) + "\n"

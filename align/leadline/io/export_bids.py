"""BIDS tables of located electrodes, after the proposal for microelectrode recordings (BEP032), which BIDS 1.11 has
not yet taken up. Names, columns and keys are those of the models in nwb2bids 0.13."""

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
SPACE = "Other"
ELECTRODES: dict[str, tuple[str, dict[str, str]]] = {
    "name": ("", {"Description": "penetration and contact"}),
    "probe_name": ("penetration", {"Description": "penetration, as in the table of probes"}),
    "x": ("ap_um", {"Description": "grows posterior, atlas frame", "Units": "um"}),
    "y": ("dv_um", {"Description": "grows inferior, atlas frame", "Units": "um"}),
    "z": ("ml_um", {"Description": "grows right, atlas frame", "Units": "um"}),
    "impedance": ("", {"Description": "impedance, which Leadline does not know", "Units": "kOhm"}),
    "shank_id": ("shank", {"Description": "shank of the probe, from 0"}),
    "location": ("region", {"Description": "structure of the atlas, acronym"}),
    "anatomical_location_id": ("region_id", {"Description": "id of the structure in the atlas"}),
    "layer": ("layer", {"Description": "cortical or hippocampal layer"}),
    "channel": ("channel", {"Description": "trace of the recording that the contact is wired to"}),
    "probability": ("p_region", {"Description": "probability, given all modelled error, that location is right"}),
    "track_depth_sd": ("track_depth_sd_um", {"Description": "sd of the place along the track", "Units": "um"}),
    "basis": ("basis", {"Description": "what placed the contact: histology, physiology, between or beyond anchors"}),
}
PROBES = {
    "probe_name": {"Description": "penetration"},
    "type": {"Description": "type of the probe, which Leadline does not know"},
    "electrode_count": {"Description": "contacts that were recorded"},
    "shank_count": {"Description": "shanks with such contacts"},
    "reference_atlas": {"Description": "atlas in which the contacts were located"},
}


def bids_files(brain: str, channels: pd.DataFrame, atlas: Atlas, provenance: Mapping[str, str]) -> dict[str, str]:
    """Path below the data set -> content: electrodes and probes as tables with sidecars, and the coordinate system.

    Names bear the brain's name without what BIDS labels cannot hold.
    """
    subject = f"sub-{re.sub(r'[^A-Za-z0-9]', '', brain) or 'brain'}"
    stem = f"{subject}/ecephys/{subject}"
    how = f"{provenance['method']}; {provenance['caution']}"
    sidecar: dict[str, Any] = {name: about for name, (_, about) in ELECTRODES.items()}
    system = {
        "MicroephysCoordinateSystem": SPACE,
        "MicroephysCoordinateUnits": "um",
        "MicroephysCoordinateSystemDescription": f"Atlas '{atlas.name}': {provenance['frame']}",
        "MicroephysCoordinateProcessingDescription": how,
        "MicroephysCoordinateProcessingReference": atlas.citation or MISSING,
    }
    return {
        f"{stem}_space-{SPACE}_electrodes.tsv": _tsv(_electrodes(channels)),
        f"{stem}_space-{SPACE}_electrodes.json": _json(sidecar | {"LocalizationMethod": how}),
        f"{stem}_space-{SPACE}_coordsystem.json": _json(system),
        f"{stem}_probes.tsv": _tsv(_probes(channels, atlas.name)),
        f"{stem}_probes.json": _json(PROBES),
    }


def _electrodes(channels: pd.DataFrame) -> list[list[str]]:
    columns = {name: [_cell(v) for v in channels[source]] for name, (source, _) in ELECTRODES.items() if source}
    pairs = zip(channels["penetration"], channels["contact_id"], strict=True)
    columns |= {"name": [_cell(f"{p}_{c}") for p, c in pairs], "impedance": [MISSING] * len(channels)}
    return [list(ELECTRODES), *(list(row) for row in zip(*(columns[name] for name in ELECTRODES), strict=True))]


def _probes(channels: pd.DataFrame, atlas: str) -> list[list[str]]:
    rows = [
        [_cell(name), MISSING, str(len(part)), str(part["shank"].nunique()), _cell(atlas)]
        for name, part in channels.groupby("penetration", sort=False)
    ]
    return [list(PROBES), *rows]


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

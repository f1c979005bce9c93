"""Where contacts sat, as contact annotations of a probeinterface file."""

from __future__ import annotations

import copy
import json
from typing import TYPE_CHECKING, Any

from leadline.base.atomic import write_text
from leadline.io.probes import read_probe

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    import pandas as pd

WORDS = {"brain_area": "region", "brain_area_coarse": "coarse_region", "layer": "layer", "basis": "basis"}
NUMBERS = ("ap_um", "dv_um", "ml_um", "track_depth_um", "track_depth_sd_um", "p_region")


def annotated(
    path: Path, probe_index: int | None, channels: pd.DataFrame, provenance: Mapping[str, str]
) -> dict[str, Any]:
    """The content of a probe file with the annotations of one of its probes added.

    Contacts are known by their ids. Those that were not recorded, or are not located, have '' and null. Everything
    else in the file stays as it is.
    """
    content: dict[str, Any] = copy.deepcopy(json.loads(path.read_text(encoding="utf-8")))
    probe = content["probes"][probe_index or 0]
    rows = channels.set_index(channels["contact_id"].astype(str))
    ids = read_probe(path, probe_index=probe_index).contact_id
    added: dict[str, list[Any]] = {name: [] for name in (*WORDS, *NUMBERS)}
    for contact in ids:
        row = rows.loc[contact] if contact in rows.index else None
        for name, column in WORDS.items():
            added[name].append("" if row is None else str(row[column]))
        for name in NUMBERS:
            value: Any = None if row is None else row[name]
            added[name].append(float(value) if value is not None and value == value else None)
    probe["contact_annotations"] = {**probe.get("contact_annotations", {}), **added}
    notes = {f"leadline_{key}": text for key, text in provenance.items()}
    probe["annotations"] = {**probe.get("annotations", {}), **notes}
    return content


def write_probe_file(content: Mapping[str, Any], path: Path) -> None:
    """Write a probe file."""
    write_text(path, json.dumps(content, indent=4, ensure_ascii=False, allow_nan=False) + "\n")

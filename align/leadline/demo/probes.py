"""The probes of the invented brain, and their probeinterface files."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from leadline.base.arrays import AnyArray
from leadline.model.probe import NOT_RECORDED, Probe


@dataclass(frozen=True, slots=True, eq=False)
class Design:
    """A probe as built and wired. ``extra_traces`` : traces after the contacts' that are no contact."""

    name: str
    probe: Probe
    wired: bool
    extra_traces: int = 0

    @property
    def n_traces(self) -> int:
        """Traces of its recordings."""
        return int(self.probe.channel.max()) + 1 + self.extra_traces


def single_shank() -> Design:
    """384 sites in four staggered columns, rows 20 um apart; a 385th trace carries a clock."""
    i = np.arange(384)
    x = np.array([43.0, 11.0, 59.0, 27.0])[i % 4]
    return Design("single", _probe(x, (i // 2) * 20.0, np.zeros(384, int), i, 175.0), False, 1)


def four_shanks() -> Design:
    """4 shanks, 250 um apart, 96 sites each in two staggered columns, one site every 20 um."""
    i = np.arange(384)
    shank, j = i // 96, i % 96
    # Traces are dealt out shank by shank in pairs, as multiplexed chips do: trace and contact number differ.
    trace = (j // 2) * 8 + shank * 2 + j % 2
    return Design("four", _probe(shank * 250.0 + (j % 2) * 32.0, j * 20.0, shank, trace, 206.0), True)


def banked() -> Design:
    """960 sites in two columns, rows 20 um apart, of which 384 in three separate blocks are switched on."""
    i = np.arange(960)
    row = i // 2
    on = (row < 80) | ((row >= 104) & (row < 164)) | ((row >= 186) & (row < 238))
    trace = np.where(on, np.cumsum(on) - 1, NOT_RECORDED)
    return Design(
        "banked", _probe((i % 2) * 32.0 + (row % 2) * 16.0, row * 20.0, np.zeros(960, int), trace, 175.0), True
    )


def _probe(x_um: AnyArray, y_um: AnyArray, shank: AnyArray, trace: AnyArray, tip_um: float) -> Probe:
    names = tuple(f"s{s}e{k}" for k, s in enumerate(shank))
    return Probe(names, x_um, y_um, shank, trace, tip_um)


def as_json(design: Design) -> dict[str, Any]:
    """The probe in the probeinterface format, version 0.3 (mm for the four-shank probe, um for the others)."""
    probe, n = design.probe, len(design.probe.contact_id)
    unit, per_um = ("mm", 1e-3) if design.name == "four" else ("um", 1.0)
    entry: dict[str, Any] = {
        "ndim": 2,
        "si_units": unit,
        "annotations": {"model_name": f"invented {design.name}", "manufacturer": "nobody"},
        "contact_annotations": {},
        "contact_positions": np.round(np.column_stack([probe.x_um, probe.y_um]) * per_um, 6).tolist(),
        "contact_plane_axes": np.tile(np.eye(2), (n, 1, 1)).tolist(),
        "contact_shapes": ["square"] * n,
        "contact_shape_params": [{"width": 12.0 * per_um}] * n,
        "contact_ids": list(probe.contact_id),
        "shank_ids": [str(s) for s in probe.shank],
    }
    if design.wired:
        entry["device_channel_indices"] = probe.channel.tolist()
    return {"specification": "probeinterface", "version": "0.3.0", "probes": [entry]}

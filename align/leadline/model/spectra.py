"""Pictures behind a profile: power by frequency and, where there were events, the evoked response by time."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import Float32Array, FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError

SPECTRA_FIELDS = (
    "shank",
    "tip_distance_um",
    "frequency_hz",
    "power_uv2_per_hz",
    "time_s",
    "evoked_uv",
    "csd_ua_per_mm3",
)


@dataclass(frozen=True, slots=True, eq=False)
class Spectra:
    """Maps of one penetration, rows as in its :class:`~leadline.model.profile.Profile`; NaN where missing.

    ``power_uv2_per_hz`` : (R, F) one-sided power density at ``frequency_hz`` (F,), which grows evenly in its logarithm.
    ``evoked_uv``, ``csd_ua_per_mm3`` : (R, T) mean response to events of ``event_kind`` at ``time_s`` (T,) from the
    event; sinks are negative. T is 0 where there was no response to events.
    """

    penetration: str
    shank: IntArray
    tip_distance_um: FloatArray
    frequency_hz: FloatArray
    power_uv2_per_hz: Float32Array
    time_s: FloatArray
    evoked_uv: Float32Array
    csd_ua_per_mm3: Float32Array
    event_kind: str = ""

    def __post_init__(self) -> None:
        rows = len(self.tip_distance_um)
        object.__setattr__(self, "shank", frozen(self.shank, np.int64))
        for name in ("tip_distance_um", "frequency_hz", "time_s"):
            object.__setattr__(self, name, frozen_vector(getattr(self, name), name))
        for name, columns in (
            ("power_uv2_per_hz", self.frequency_hz.size),
            ("evoked_uv", self.time_s.size),
            ("csd_ua_per_mm3", self.time_s.size),
        ):
            values = frozen(getattr(self, name), np.float32)
            if values.shape != (rows, columns):
                raise LeadlineError(
                    f"{name} has shape {values.shape}, not {(rows, columns)}", where=f"spectra of {self.penetration}"
                )
            object.__setattr__(self, name, values)

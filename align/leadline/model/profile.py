"""Depth profiles: physiological features as functions of tip distance."""

from __future__ import annotations

from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from collections.abc import Mapping


@dataclass(frozen=True, slots=True)
class Feature:
    """A column of ``profiles/NAME.parquet``.

    ``group`` : 'lfp' (fields, blurred over tens of um by volume conduction) or 'units' (spikes, sharp).
    ``circular`` : an angle in radians. ``words`` : how to say it in a sentence.
    """

    name: str
    group: str
    words: str
    circular: bool = False


FEATURES = (
    Feature("delta_power_db", "lfp", "delta power"),
    Feature("theta_power_db", "lfp", "theta power"),
    Feature("gamma_power_db", "lfp", "gamma power"),
    Feature("ripple_power_db", "lfp", "ripple-band power"),
    Feature("high_frequency_power_db", "lfp", "high-frequency power"),
    Feature("theta_phase_rad", "lfp", "theta phase", circular=True),
    Feature("theta_coherence", "lfp", "theta coherence with the reference row"),
    Feature("neighbour_correlation", "lfp", "correlation between neighbours"),
    Feature("neighbour_coherence", "lfp", "gamma coherence between neighbours"),
    Feature("evoked_csd_ua_per_mm3", "lfp", "current sink (negative) or source after events"),
    Feature("evoked_amplitude_uv", "lfp", "evoked potential"),
    Feature("evoked_latency_s", "lfp", "latency of the evoked response"),
    Feature("sink_latency_s", "lfp", "latency of the current sink"),
    Feature("unit_density_per_100um", "units", "unit density"),
    Feature("spike_rate_hz", "units", "spike rate"),
    Feature("spike_amplitude_uv", "units", "spike amplitude"),
    Feature("spike_width_s", "units", "spike width"),
    Feature("evoked_rate_hz", "units", "spike response to events"),
    Feature("crossing_density_hz_per_100um", "units", "spike density (threshold crossings)"),
    Feature("crossing_amplitude_uv", "units", "depth of threshold crossings"),
)
FEATURE_BY_NAME: Mapping[str, Feature] = MappingProxyType({f.name: f for f in FEATURES})


@dataclass(frozen=True, slots=True, eq=False)
class Profile:
    """Features of one penetration by row; a row is one tip distance on one shank, NaN where a feature is missing.

    ``shank``, ``tip_distance_um`` : (R,), sorted by shank, then from the tip upward.
    ``features`` : name -> (R,) float64. ``flags`` : (R,) text, '' or 'dead', 'noisy', 'outside'.
    ``warnings`` : sentences for the user (what share was read, what was left out). ``read_s`` : of each recording, how
    many seconds of samples were read, and of how many outside excluded intervals.
    """

    penetration: str
    shank: IntArray
    tip_distance_um: FloatArray
    features: Mapping[str, FloatArray]
    flags: tuple[str, ...] = ()
    warnings: tuple[str, ...] = field(default=())
    read_s: tuple[tuple[float, float], ...] = ()

    def __post_init__(self) -> None:
        rows = len(self.tip_distance_um)
        object.__setattr__(self, "tip_distance_um", frozen_vector(self.tip_distance_um, "tip_distance_um"))
        object.__setattr__(self, "shank", frozen(self.shank, np.int64))
        checked = {}
        for name, values in self.features.items():
            if name not in FEATURE_BY_NAME:
                raise LeadlineError(f"'{name}' is no known feature", where=f"profile of {self.penetration}")
            checked[name] = frozen_vector(values, name, length=rows, finite=False)
        object.__setattr__(self, "features", MappingProxyType(checked))
        object.__setattr__(self, "flags", tuple(self.flags) or ("",) * rows)

    def of_shank(self, shank: int) -> Profile:
        """The rows of one shank."""
        rows = np.flatnonzero(self.shank == shank)
        return Profile(
            self.penetration,
            self.shank[rows],
            self.tip_distance_um[rows],
            {name: values[rows] for name, values in self.features.items()},
            tuple(self.flags[int(i)] for i in rows),
            self.warnings,
            self.read_s,
        )

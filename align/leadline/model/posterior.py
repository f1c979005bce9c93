"""What is believed about one shank's depth map: draws of the track depth of every row."""

from __future__ import annotations

from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray, IntArray, frozen, frozen_vector

if TYPE_CHECKING:
    from collections.abc import Mapping


@dataclass(frozen=True, slots=True, eq=False)
class DepthPosterior:
    """Equally weighted draws of the depth map of one shank, in the physical frame (all modelled error but the
    lateral registration error is in them).

    ``tip_distance_um`` : (R,) ascending. ``depth_um`` : (S, R) track depths, each draw decreasing along a row.
    ``informed`` : probability that the recording speaks of these labels at all (0 with no physiology).
    ``diagnostics`` : effective sample size, evidence and the like. ``warnings`` : sentences for the user.
    ``label_id`` : (S, R) structure of each row in each draw, with the displacement of borders and of the track across
    itself that the draw believes in, which the physical depth alone does not tell; None where not known.
    """

    penetration: str
    shank: int
    tip_distance_um: FloatArray
    depth_um: FloatArray
    informed: float = 0.0
    diagnostics: Mapping[str, float] = field(default_factory=dict)
    warnings: tuple[str, ...] = ()
    label_id: IntArray | None = None

    def __post_init__(self) -> None:
        tip = frozen_vector(self.tip_distance_um, "tip_distance_um")
        object.__setattr__(self, "tip_distance_um", tip)
        object.__setattr__(self, "depth_um", frozen(self.depth_um))
        object.__setattr__(self, "diagnostics", MappingProxyType(dict(self.diagnostics)))
        if (np.diff(tip) <= 0).any():
            raise ValueError("tip_distance_um must ascend")
        if self.label_id is not None:
            object.__setattr__(self, "label_id", frozen(self.label_id, np.int64))
        if self.depth_um.ndim != 2 or self.depth_um.shape[1] != tip.size:
            raise ValueError(f"depth_um is {self.depth_um.shape}, rows are {tip.size}")

    @property
    def median_um(self) -> FloatArray:
        """Median track depth ``(R,)``."""
        return np.median(self.depth_um, axis=0)

    @property
    def sd_um(self) -> FloatArray:
        """Standard deviation ``(R,)`` of the track depth."""
        return np.asarray(self.depth_um.std(axis=0), np.float64)

"""The depth map: tip distance to track depth, monotone, with an explicit rule beyond its ends."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import FloatArray, frozen_vector
from leadline.base.errors import LeadlineError


@dataclass(frozen=True, slots=True, eq=False)
class DepthMap:
    """Track depth falls as tip distance grows; between knots a monotone cubic, beyond them slope 1.

    ``tip_distance_um`` : (k >= 1,) ascending. ``track_depth_um`` : (k,) descending.

    References
    ----------
    Fritsch & Butland (1984), SIAM J. Sci. Stat. Comput. 5, 300: the monotone cubic (scipy's PCHIP).

    Examples
    --------
    >>> DepthMap([100.0, 1100.0], [3000.0, 2050.0])(np.array([0.0, 600.0, 2000.0])).tolist()
    [3100.0, 2525.0, 1150.0]
    """

    tip_distance_um: FloatArray
    track_depth_um: FloatArray

    def __post_init__(self) -> None:
        tip = frozen_vector(self.tip_distance_um, "DepthMap.tip_distance_um")
        depth = frozen_vector(self.track_depth_um, "DepthMap.track_depth_um", length=tip.size)
        if not tip.size:
            raise LeadlineError("a depth map needs at least one knot", where="depth map")
        if (np.diff(tip) <= 0).any() or (np.diff(depth) >= 0).any():
            raise LeadlineError("a depth map may stretch but not fold", where="depth map")
        object.__setattr__(self, "tip_distance_um", tip)
        object.__setattr__(self, "track_depth_um", depth)

    def __call__(self, tip_distance_um: FloatArray) -> FloatArray:
        """Track depth ``(n,)`` of tip distances ``(n,)``."""
        x = np.asarray(tip_distance_um, float)
        inside = np.clip(x, self.tip_distance_um[0], self.tip_distance_um[-1])
        if self.tip_distance_um.size == 1:
            depth = np.full(x.shape, self.track_depth_um[0])
        elif self.tip_distance_um.size == 2:
            depth = np.interp(inside, self.tip_distance_um, self.track_depth_um)
        else:
            from scipy.interpolate import PchipInterpolator

            depth = PchipInterpolator(self.tip_distance_um, self.track_depth_um)(inside)
        return np.asarray(depth - (x - inside), float)

    def stretch(self, tip_distance_um: FloatArray) -> FloatArray:
        """Local stretch ``(n,)``: atlas um per probe um, by a symmetric difference of 2 um."""
        x = np.asarray(tip_distance_um, float)
        return (self(x - 1.0) - self(x + 1.0)) / 2.0

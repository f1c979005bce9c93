"""Everything that speaks about the depth map of one shank."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    from leadline.model.anchor import Anchor
    from leadline.model.profile import Profile


@dataclass(frozen=True, slots=True, eq=False)
class ShankEvidence:
    """Profile, labels along the track, dye end and anchors of one shank.

    ``tip_distance_um`` : (R,) ascending, rows at which draws are wanted. ``profile`` : rows of this shank, or None.
    ``depth_um`` : (M,) ascending track depths, about 5 um apart, from above the surface to beyond the track's end.
    ``label_id`` : (M,) structure there, 0 outside the brain. ``lateral_label_id`` : (K, M) the same on copies of the
    track displaced across itself by draws of the registration error. ``end_depth_um`` : the dye's end, where tip
    distance 0 is expected. ``inserted_um`` : manipulator depth, the tip distance that should lie at the surface.
    """

    penetration: str
    shank: int
    tip_distance_um: FloatArray
    profile: Profile | None
    depth_um: FloatArray
    label_id: IntArray
    end_depth_um: float
    entry_sd_um: float = 30.0
    end_sd_um: float = 30.0
    registration_error_um: float = 30.0
    inserted_um: float | None = None
    anchors: tuple[Anchor, ...] = ()
    lateral_label_id: IntArray = None  # type: ignore[assignment]

    def __post_init__(self) -> None:
        where = f"evidence of {self.penetration}, shank {self.shank}"
        tip = frozen_vector(self.tip_distance_um, f"{where}: tip_distance_um")
        depth = frozen_vector(self.depth_um, f"{where}: depth_um")
        label = frozen(self.label_id, np.int64)
        lateral = frozen(label[None] if self.lateral_label_id is None else self.lateral_label_id, np.int64)
        if not tip.size or any(a >= b for a, b in pairwise(tip.tolist())):
            raise LeadlineError("tip distances must ascend, without repeats", where=where)
        if depth.size < 2 or (np.diff(depth) <= 0).any():
            raise LeadlineError("track depths must ascend", where=where)
        if label.shape != depth.shape or lateral.ndim != 2 or lateral.shape[1] != depth.size:
            raise LeadlineError(f"labels {label.shape}, {lateral.shape} do not fit {depth.size} depths", where=where)
        object.__setattr__(self, "tip_distance_um", tip)
        object.__setattr__(self, "depth_um", depth)
        object.__setattr__(self, "label_id", label)
        object.__setattr__(self, "lateral_label_id", lateral)
        object.__setattr__(self, "anchors", tuple(self.anchors))

    def label_at(self, depth_um: FloatArray, copy: IntArray | None = None) -> IntArray:
        """Structure id at track depths ``(...)``; of lateral copy ``copy`` (broadcast) where that is not negative."""
        mid = (self.depth_um[1:] + self.depth_um[:-1]) / 2
        cell = np.searchsorted(mid, depth_um)
        if copy is None:
            return self.label_id[cell]
        moved = self.lateral_label_id[np.maximum(copy, 0), cell]
        return np.where(copy < 0, self.label_id[cell], moved)

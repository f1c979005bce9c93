"""The path of a shank through the tissue, as a curve by arc length."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leadline.base.arrays import FloatArray, frozen_points, frozen_vector
from leadline.base.errors import LeadlineError

END_TANGENT_UM = 300.0


@dataclass(frozen=True, slots=True, eq=False)
class Trace:
    """A dye track in stack um, from the brain surface to the end of the dye.

    ``points_um`` : (n >= 2, 3). ``radius_um`` : (n,) of the dye. ``entry_sd_um``, ``end_sd_um`` : standard deviation
    along the track of the two ends. ``contrast`` : dye over background, in noise sd. ``coverage`` : share of the
    length where dye is seen.
    """

    points_um: FloatArray
    radius_um: FloatArray
    entry_sd_um: float
    end_sd_um: float
    contrast: float = float("nan")
    coverage: float = 1.0

    def __post_init__(self) -> None:
        object.__setattr__(self, "points_um", frozen_points(self.points_um, "Trace.points_um", min_rows=2))
        object.__setattr__(
            self,
            "radius_um",
            frozen_vector(self.radius_um, "Trace.radius_um", length=len(self.points_um), finite=False),
        )

    @property
    def length_um(self) -> float:
        """Arc length in stack um."""
        return float(arc_length(self.points_um)[-1])


@dataclass(frozen=True, slots=True, eq=False)
class HandTrack:
    """A track as a person drew it: points ``(n >= 2, 3)`` in stack um. ``entry_set`` : the first point is where the
    shank entered, by the person's word, and not by where the brain surface is found."""

    points_um: FloatArray
    entry_set: bool = False

    def __post_init__(self) -> None:
        object.__setattr__(self, "points_um", frozen_points(self.points_um, "HandTrack.points_um", min_rows=2))


@dataclass(frozen=True, slots=True, eq=False)
class Track:
    """One shank's path, from entry to tip, in stack and in atlas um.

    ``track_depth_um`` : (n,) arc length in atlas um, 0 at the entry. ``source`` : 'dye' or 'points'.
    """

    penetration: str
    shank: int
    stack_um: FloatArray
    atlas_um: FloatArray
    radius_um: FloatArray
    entry_sd_um: float
    end_sd_um: float
    source: str = "dye"
    track_depth_um: FloatArray = None  # type: ignore[assignment]

    def __post_init__(self) -> None:
        atlas = frozen_points(self.atlas_um, "Track.atlas_um", min_rows=2)
        stack = frozen_points(self.stack_um, "Track.stack_um", min_rows=2)
        if len(stack) != len(atlas):
            raise LeadlineError("stack and atlas points differ in number", where=f"track {self.penetration}")
        depth = arc_length(atlas) if self.track_depth_um is None else self.track_depth_um
        if (np.diff(depth) <= 0).any():
            raise LeadlineError("two neighbouring points coincide", where=f"track {self.penetration}/{self.shank}")
        object.__setattr__(self, "atlas_um", atlas)
        object.__setattr__(self, "stack_um", stack)
        object.__setattr__(
            self, "radius_um", frozen_vector(self.radius_um, "radius_um", length=len(atlas), finite=False)
        )
        object.__setattr__(self, "track_depth_um", frozen_vector(depth, "track_depth_um", length=len(atlas)))

    @property
    def length_um(self) -> float:
        """Track depth of the track's end."""
        return float(self.track_depth_um[-1])

    def atlas_at(self, track_depth_um: FloatArray) -> FloatArray:
        """Atlas um ``(..., 3)`` at track depths; straight on beyond either end."""
        return along(self.track_depth_um, self.atlas_um, track_depth_um)

    def stack_at(self, track_depth_um: FloatArray) -> FloatArray:
        """Stack um ``(..., 3)`` at track depths; straight on beyond either end."""
        return along(self.track_depth_um, self.stack_um, track_depth_um)


def arc_length(points_um: FloatArray) -> FloatArray:
    """Arc length ``(n,)`` along a polyline, 0 at its first point.

    Examples
    --------
    >>> arc_length(np.array([[0.0, 0, 0], [3, 4, 0], [3, 4, 2]])).tolist()
    [0.0, 5.0, 7.0]
    """
    steps = np.linalg.norm(np.diff(np.asarray(points_um, float), axis=0), axis=1)
    return np.concatenate([[0.0], np.cumsum(steps)])


def along(depth_um: FloatArray, points_um: FloatArray, at_um: FloatArray) -> FloatArray:
    """Points at depths ``at_um`` of a curve sampled at ``depth_um``; beyond its ends it goes on along the chord of
    the last 300 um, which one noisy end point cannot turn."""
    at = np.asarray(at_um, float)
    inside = np.clip(at, depth_um[0], depth_um[-1])
    points = np.stack([np.interp(inside, depth_um, points_um[:, k]) for k in range(3)], axis=-1)
    beyond = (at - inside)[..., None]
    reach = min(END_TANGENT_UM, float(depth_um[-1] - depth_um[0]))
    ends = np.array([depth_um[0], depth_um[0] + reach, depth_um[-1] - reach, depth_um[-1]])
    a, b, c, d = (np.array([np.interp(e, depth_um, points_um[:, k]) for k in range(3)]) for e in ends)
    tangent = np.where(beyond < 0, (b - a) / reach, (d - c) / reach)
    return np.asarray(points + beyond * tangent, np.float64)

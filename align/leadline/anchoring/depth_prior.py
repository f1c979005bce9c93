"""The prior over depth maps of all shanks of one probe: a Gaussian process that anchors condition exactly.

Two depths are told apart. The *physical* depth of a contact along the track obeys the law of depth (offset, scale,
local stretch). The *label* depth, which the recording speaks of, is the physical depth plus the displacement of the
animal's borders against the atlas's along the registered track. Anchors bind the physical depth.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import FloatArray, IntArray

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.evidence import ShankEvidence
    from leadline.anchoring.knowledge import DepthLaw

NODE_UM = 40.0
RESIDUAL_UM = 7.0
INSERTED_SD_UM = 130.0
SHANK_OFFSET_SD_UM = 25.0
SHANK_SCALE_SD = 0.012
SHANK_SLOPE_SHARE = 0.25
OBLIQUE = 0.8
CANDIDATES = 16


@dataclass(frozen=True, slots=True, eq=False)
class DepthPrior:
    """Label depth at nodes ``mean + basis @ z`` with z standard normal, times ``offset_ratio`` of the tip offset.

    ``node_um`` : tip distance of the nodes of each shank; ``mean_um`` : (n,), ``basis`` : (n, J) over all nodes of
    all shanks, shank after shank. ``offset_mean_um``, ``offset_basis`` (J,) : the tip offset that all shanks share.
    ``physical_mean_um``, ``physical_basis``, ``physical_rest`` : the physical depth at the nodes given z, and the
    factor (n, n) of what z leaves open.
    """

    node_um: tuple[FloatArray, ...]
    mean_um: FloatArray
    basis: FloatArray
    offset_mean_um: float
    offset_basis: FloatArray
    physical_mean_um: FloatArray
    physical_basis: FloatArray
    physical_rest: FloatArray
    law: DepthLaw

    @property
    def dims(self) -> int:
        """Number J of standard normal coordinates."""
        return int(self.basis.shape[1])

    def slice(self, shank: int) -> slice:
        """Nodes of the shank at position ``shank``."""
        start = sum(n.size for n in self.node_um[:shank])
        return slice(start, start + self.node_um[shank].size)

    def weights(self, shank: int, tip_distance_um: FloatArray) -> FloatArray:
        """Matrix ``(r, n_shank)`` that interpolates node values at tip distances."""
        return interpolation(self.node_um[shank], tip_distance_um)

    def log_ratio(self, offset_um: FloatArray) -> FloatArray:
        """Log density of the two-part offset prior over that of the wide Gaussian which the basis uses."""
        law, x = self.law, np.asarray(offset_um)
        parts = [
            np.log(share / (sd * np.sqrt(2 * np.pi))) - 0.5 * (x / sd) ** 2
            for share, sd in (
                (1 - law.stray_share, law.offset_sd_um),
                (law.stray_share, law.stray_offset_sd_um),
            )
        ]
        wide = -np.log(law.stray_offset_sd_um * np.sqrt(2 * np.pi)) - 0.5 * (x / law.stray_offset_sd_um) ** 2
        return np.asarray(np.logaddexp(*parts) - wide, np.float64)

    def draw(self, rng: np.random.Generator, n: int) -> FloatArray:
        """Prior draws of z ``(n, J)`` by rejection on the offset, in antithetic pairs.

        Every slot has its own candidates, so that a slight change of the anchors changes few slots.
        """
        half = (n + 1) // 2
        candidates = rng.standard_normal((half, CANDIDATES, self.dims))
        uniform = np.log(rng.random((half, CANDIDATES)))
        top = float(self.log_ratio(np.zeros(1))[0])
        slot = np.arange(half)
        drawn = np.empty((half, 2, self.dims))
        for side, sign in enumerate((1.0, -1.0)):
            offset = self.offset_mean_um + sign * (candidates @ self.offset_basis)
            accepted = uniform < self.log_ratio(offset) - top
            accepted[:, -1] = True
            drawn[:, side] = sign * candidates[slot, accepted.argmax(axis=1)]
        return drawn.reshape(2 * half, self.dims)[:n]


def interpolation(node_um: FloatArray, at_um: FloatArray) -> FloatArray:
    """Linear interpolation as a matrix ``(r, n)``."""
    at = np.asarray(at_um, float)
    if node_um.size == 1:
        return np.ones((at.size, 1))
    left = np.clip(np.searchsorted(node_um, at, side="right") - 1, 0, node_um.size - 2)
    share = (at - node_um[left]) / (node_um[left + 1] - node_um[left])
    matrix = np.zeros((at.size, node_um.size))
    matrix[np.arange(at.size), left] = 1 - share
    matrix[np.arange(at.size), left + 1] = share
    return matrix


def matern32(distance_um: FloatArray, length_um: float) -> FloatArray:
    """Matern covariance of smoothness 3/2 and unit variance (Rasmussen & Williams 2006, eq. 4.17)."""
    r = np.sqrt(3.0) * np.abs(distance_um) / length_um
    return np.asarray((1 + r) * np.exp(-r), np.float64)


def build(shanks: Sequence[ShankEvidence], law: DepthLaw) -> DepthPrior:
    """Prior over the depth maps of the shanks of one probe, conditioned on all their anchors."""
    nodes = tuple(_nodes(s) for s in shanks)
    x = np.concatenate(nodes)
    owner = np.repeat(np.arange(len(shanks), dtype=np.int64), [n.size for n in nodes])
    mean = np.concatenate([s.end_depth_um - n for s, n in zip(shanks, nodes, strict=True)])
    physical = _law_covariance(x, owner, shanks, law)
    border = _border_covariance(x, owner, shanks, law)
    n = x.size
    # joint vector: [offset, label depth at nodes, physical depth at nodes]
    wide = law.stray_offset_sd_um**2
    joint = np.empty((2 * n + 1, 2 * n + 1))
    joint[0, 0] = wide
    joint[0, 1:] = joint[1:, 0] = wide
    joint[1 : n + 1, 1 : n + 1] = physical + border + wide
    joint[1 : n + 1, n + 1 :] = joint[n + 1 :, 1 : n + 1] = joint[n + 1 :, n + 1 :] = physical + wide
    centre = np.concatenate([[0.0], mean, mean])
    matrix, value, variance = _observations(shanks, nodes)
    if value.size:
        whole = np.zeros((value.size, 2 * n + 1))
        whole[:, n + 1 :] = matrix
        centre, joint = conditioned(centre, joint, whole, value, variance)
    return _reduced(nodes, centre, joint, law)


def conditioned(
    mean: FloatArray, covariance: FloatArray, matrix: FloatArray, value: FloatArray, variance: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Gaussian ``(mean, covariance)`` given ``matrix @ x = value`` with noise of ``variance``.

    References: Rasmussen & Williams 2006, eq. 2.22-2.24.
    """
    from scipy.linalg import cho_factor, cho_solve

    cross = covariance @ matrix.T
    factor = cho_factor(matrix @ cross + np.diag(variance), lower=True)
    gain = cho_solve(factor, cross.T)
    return mean + gain.T @ (value - matrix @ mean), covariance - cross @ gain


def _nodes(shank: ShankEvidence) -> FloatArray:
    """Tip distances about 40 um apart that span rows, profile, anchors and the inserted depth."""
    ends = [0.0, *shank.tip_distance_um[[0, -1]], *(a.tip_distance_um for a in shank.anchors)]
    if shank.profile is not None and shank.profile.tip_distance_um.size:
        ends += [*shank.profile.tip_distance_um[[0, -1]]]
    if shank.inserted_um is not None:
        ends.append(shank.inserted_um)
    low, high = min(ends), max(ends)
    count = max(2, int(np.ceil((high - low) / NODE_UM)) + 1)
    return np.linspace(low, max(high, low + NODE_UM), count)


def _law_covariance(x: FloatArray, owner: IntArray, shanks: Sequence[ShankEvidence], law: DepthLaw) -> FloatArray:
    """Scale and local stretch, both pinned at the tip, and what sets each shank apart; without the shared offset."""
    same = owner[:, None] == owner[None, :]
    scale = law.scale_sd**2 + SHANK_SCALE_SD**2 * same
    stretch = law.slope_sd**2 * _integrated(x, law.slope_length_um)
    shared = np.where(same, 1.0, 1 - SHANK_SLOPE_SHARE if len(shanks) > 1 else 1.0)
    ends = np.array([s.end_sd_um**2 + s.registration_error_um**2 + SHANK_OFFSET_SD_UM**2 for s in shanks])
    return np.asarray(scale * np.outer(x, x) + shared * stretch + same * ends[owner][:, None], np.float64)


def _border_covariance(x: FloatArray, owner: IntArray, shanks: Sequence[ShankEvidence], law: DepthLaw) -> FloatArray:
    """Borders of the animal against the atlas's, and registration error across an oblique border."""
    variance = np.array([law.border_sd_um**2 + (OBLIQUE * s.registration_error_um) ** 2 for s in shanks])
    same = owner[:, None] == owner[None, :]
    return np.asarray(same * variance[owner][:, None] * matern32(x[:, None] - x[None, :], law.border_length_um))


def _integrated(x: FloatArray, length_um: float, step_um: float = 20.0) -> FloatArray:
    """Covariance of the integral from 0 to x of a Matern-3/2 process of unit variance."""
    grid = np.arange(min(0.0, x.min()) - step_um, max(0.0, x.max()) + 2 * step_um, step_um)
    density = matern32(grid[:, None] - grid[None, :], length_um) * step_um**2
    summed = density.cumsum(0).cumsum(1)
    at = interpolation(grid + step_um / 2, np.concatenate([x, [0.0]]))
    full = at @ summed @ at.T
    pinned = full - full[-1:, :] - full[:, -1:] + full[-1, -1]
    return np.asarray(pinned[:-1, :-1], np.float64)


def slope_variance(tip_distance_um: FloatArray, law: DepthLaw) -> float:
    """Variance that local stretch alone gives to the slope of a straight line fitted to a depth map."""
    centred = tip_distance_um - tip_distance_um.mean()
    weight = centred / (centred @ centred)
    return float(law.slope_sd**2 * weight @ _integrated(tip_distance_um, law.slope_length_um) @ weight)


def _observations(
    shanks: Sequence[ShankEvidence], nodes: tuple[FloatArray, ...]
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Anchors and inserted depths as rows of a matrix over all nodes, their values and variances."""
    rows, values, variances = [], [], []
    total = sum(n.size for n in nodes)
    start = 0
    for shank, node in zip(shanks, nodes, strict=True):
        pairs = [(a.tip_distance_um, a.track_depth_um, a.sd_um**2) for a in shank.anchors]
        if shank.inserted_um is not None:
            pairs.append((shank.inserted_um, 0.0, INSERTED_SD_UM**2 + shank.entry_sd_um**2))
        for tip, depth, variance in pairs:
            row = np.zeros(total)
            row[start : start + node.size] = interpolation(node, np.array([tip]))[0]
            rows.append(row)
            values.append(depth)
            variances.append(variance)
        start += node.size
    return np.array(rows).reshape(len(rows), total), np.array(values), np.array(variances)


def _reduced(nodes: tuple[FloatArray, ...], centre: FloatArray, joint: FloatArray, law: DepthLaw) -> DepthPrior:
    """Keep the leading directions of (offset, label depth); the physical depth follows from them."""
    n = (centre.size - 1) // 2
    lead = joint[: n + 1, : n + 1].copy()
    weight = np.ones(n + 1)
    weight[0] = np.sqrt(n)  # so that the truncation keeps the offset
    values, vectors = np.linalg.eigh(lead * np.outer(weight, weight))
    order = np.argsort(values)[::-1]
    values, vectors = np.maximum(values[order], 0), vectors[:, order]
    left = values[::-1].cumsum()[::-1]
    dims = max(2, int((left > n * RESIDUAL_UM**2).sum()))
    z_basis = vectors[:, :dims] * np.sqrt(values[:dims]) / weight[:, None]
    # Cov(physical, z) with z = values^-1/2 V' W (offset, label)
    to_z = (vectors[:, :dims] * weight[:, None]) / np.sqrt(np.maximum(values[:dims], 1e-9))
    physical_basis = joint[n + 1 :, : n + 1] @ to_z
    rest = joint[n + 1 :, n + 1 :] - physical_basis @ physical_basis.T
    rest_values, rest_vectors = np.linalg.eigh((rest + rest.T) / 2)
    return DepthPrior(
        nodes,
        centre[1 : n + 1],
        np.ascontiguousarray(z_basis[1:]),
        float(centre[0]),
        np.ascontiguousarray(z_basis[0]),
        centre[n + 1 :],
        physical_basis,
        rest_vectors * np.sqrt(np.maximum(rest_values, 0)),
        law,
    )

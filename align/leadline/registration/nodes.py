"""A displacement on coarse nodes: cubic splines to voxels, sums back to nodes, a smoothness prior, and its inverse."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import Float32Array, FloatArray

if TYPE_CHECKING:
    from leadline.registration.grids import Grid

Basis = tuple[Float32Array, Float32Array, Float32Array]
INNER = (slice(1, -1),) * 3


def spline_basis(nodes: Grid, voxels: Grid, degree: int) -> Basis:
    """Three matrices (n voxels, n nodes) that interpolate node values along each axis; 0 beyond the nodes."""
    from scipy.interpolate import make_interp_spline

    matrices = []
    for axis in range(3):
        x, at = nodes.axis_um(axis), voxels.axis_um(axis)
        matrix = make_interp_spline(x, np.eye(len(x)), k=degree)(np.clip(at, x[0], x[-1]))
        matrix[(at < x[0]) | (at > x[-1])] = 0
        matrices.append(matrix.astype(np.float32))
    return matrices[0], matrices[1], matrices[2]


def to_voxels(basis: Basis, values: Float32Array) -> Float32Array:
    """Interpolate node values (n0, n1, n2) at the voxels."""
    out = np.tensordot(basis[0], values, (1, 0))
    out = np.tensordot(basis[1], out, (1, 1)).transpose(1, 0, 2)
    return np.ascontiguousarray(np.tensordot(out, basis[2], (2, 1)), np.float32)


def to_nodes(basis: Basis, values: Float32Array) -> Float32Array:
    """Sum voxel values onto the nodes: the transpose of :func:`to_voxels`."""
    out = np.tensordot(values, basis[2], (2, 0))
    out = np.tensordot(basis[0].T, out, (1, 0))
    return np.ascontiguousarray(np.tensordot(basis[1].T, out, (1, 1)).transpose(1, 0, 2), np.float32)


@dataclass(frozen=True, slots=True, eq=False)
class Prior:
    """Gaussian prior of a displacement that vanishes on the outer nodes: bending energy.

    ``precision`` : (n0 - 2, n1 - 2, n2 - 2) of each sine mode, per um^2.
    """

    precision: FloatArray

    def times(self, values: Float32Array) -> Float32Array:
        """Precision times a displacement ``(3, n0, n1, n2)``."""
        return _in_modes(values, self.precision)

    def solve(self, stiffness: tuple[Float32Array, ...], right: Float32Array, *, iterations: int = 30) -> Float32Array:
        """Solve ``(S + precision) d = right`` by conjugate gradients, preconditioned in the sine modes."""
        typical = float(np.mean([stiffness[k].mean() for k in (0, 3, 5)]))
        rough = 1 / (self.precision + typical)
        rest = _interior(right)
        found = np.zeros_like(rest)
        guided = _in_modes(rest, rough)
        way, size = guided.copy(), float((rest * guided).sum())
        first = size
        for _ in range(iterations):
            if size <= 1e-4 * first:
                break
            image = self.times(way) + _interior(_times_stiffness(stiffness, way))
            length = size / float((way * image).sum())
            found += length * way
            rest -= length * image
            guided = _in_modes(rest, rough)
            size, before = float((rest * guided).sum()), size
            way = guided + (size / before) * way
        return found

    def draw(self, stiffness: tuple[Float32Array, ...], rng: np.random.Generator) -> Float32Array:
        """Draw a displacement error from the posterior N(0, (S + precision)^-1), by perturbing and solving [1]_.

        .. [1] Papandreou & Yuille (2010). Gaussian sampling by local perturbations. NeurIPS 23, 1858.
        """
        shape = (3, *stiffness[0].shape)
        noise = _in_modes(_interior(rng.standard_normal(shape).astype(np.float32)), np.sqrt(self.precision))
        xx, xy, xz, yy, yz, zz = (np.asarray(s, np.float64) for s in stiffness)
        tensor = np.stack([xx, xy, xz, xy, yy, yz, xz, yz, zz], axis=-1).reshape(-1, 3, 3)
        tensor += np.eye(3) * (1e-9 + 1e-5 * np.trace(tensor, axis1=1, axis2=2))[:, None, None]
        root = np.linalg.cholesky(tensor)
        kick = np.einsum("nij,nj->ni", root, rng.standard_normal((len(root), 3))).T.reshape(shape)
        return self.solve(stiffness, _interior(noise + kick.astype(np.float32)))


def bending_prior(nodes: Grid, stiffness: float) -> Prior:
    """Bending energy, ``stiffness`` per node volume in mm^3, for displacements of the order of 100 um."""
    h_mm = nodes.step_um / 1000
    waves = [(2 - 2 * np.cos(np.pi * np.arange(1, n - 1) / (n - 1))) / h_mm**2 for n in nodes.shape]
    laplace = waves[0][:, None, None] + waves[1][None, :, None] + waves[2][None, None, :]
    return Prior(stiffness * laplace**2 * h_mm**3 * 1e-4)


def jacobian(values: Float32Array, step_um: float) -> Float32Array:
    """Determinant of the gradient of ``x + u(x)`` at the nodes, u = ``values`` (3, n0, n1, n2)."""
    rows = [list(np.gradient(values[i], step_um)) for i in range(3)]
    for i in range(3):
        rows[i][i] = rows[i][i] + 1
    (a, b, c), (d, e, f), (g, h, i_) = rows
    return np.asarray(a * (e * i_ - f * h) - b * (d * i_ - f * g) + c * (d * h - e * g), np.float32)


def unfolded(values: Float32Array, step_um: float, *, least: float) -> Float32Array:
    """Smooth a displacement, only where it must be and as little as needed, until its Jacobian exceeds ``least``."""
    from scipy.ndimage import gaussian_filter, maximum_filter

    for _ in range(50):
        bad = jacobian(values, step_um) < least
        if not bad.any():
            return values
        share = gaussian_filter(maximum_filter(bad.astype(np.float32), 5), 1.0)
        calm = np.stack([gaussian_filter(v, 1.0) for v in values])
        values = _interior(values + share * (calm - values))
    return np.zeros_like(values)


def inverted(values: Float32Array, *, iterations: int = 30) -> Float32Array:
    """The displacement v, on the same nodes and in steps, with ``v(y) = -u(y + v(y))`` (fixed point iteration)."""
    from leadline.registration.kernels import pull

    eye, zero = np.eye(3), np.zeros(3)
    wanted = np.broadcast_to(np.True_, values.shape[1:])
    back = np.zeros_like(values)
    for _ in range(iterations):
        back = -np.stack([pull(v, eye, zero, back[0], back[1], back[2], wanted) for v in values])
    return _interior(back)


def _interior(values: Float32Array) -> Float32Array:
    out = np.zeros_like(values)
    out[(slice(None), *INNER)] = values[(slice(None), *INNER)]
    return out


def _in_modes(values: Float32Array, factor: FloatArray) -> Float32Array:
    from scipy import fft

    out = np.zeros_like(values)
    for k in range(3):
        out[k][INNER] = fft.idstn(fft.dstn(values[k][INNER], type=1) * factor, type=1)
    return out


def _times_stiffness(s: tuple[Float32Array, ...], d: Float32Array) -> Float32Array:
    return np.stack(
        [
            s[0] * d[0] + s[1] * d[1] + s[2] * d[2],
            s[1] * d[0] + s[3] * d[1] + s[4] * d[2],
            s[2] * d[0] + s[4] * d[1] + s[5] * d[2],
        ]
    )

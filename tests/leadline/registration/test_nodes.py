"""The displacement on nodes: splines and their transpose, the prior's solver, folding, the inverse."""

from __future__ import annotations

import numpy as np
import pytest

from leadline.base.arrays import Float32Array
from leadline.registration.grids import Grid
from leadline.registration.nodes import (
    bending_prior,
    inverted,
    jacobian,
    spline_basis,
    to_nodes,
    to_voxels,
    unfolded,
)

NODES = Grid((9, 8, 7), 200.0, np.array([-100.0, 0.0, 50.0]))
VOXELS = Grid((14, 13, 12), 100.0, np.array([0.0, 50.0, 100.0]))
INNER = (slice(None), *(slice(1, -1),) * 3)


def bump(size: float, seed: int = 0) -> Float32Array:
    """Random smooth displacement that vanishes on the outer nodes."""
    from scipy.ndimage import gaussian_filter

    u = np.zeros((3, *NODES.shape), np.float32)
    u[INNER] = np.random.default_rng(seed).normal(size=u[INNER].shape)
    u = np.stack([gaussian_filter(v, 1.0, mode="constant") for v in u])
    out = np.zeros_like(u)
    out[INNER] = u[INNER]
    return np.asarray(out * size / np.abs(out).max(), np.float32)


def test_a_cubic_polynomial_is_interpolated_exactly() -> None:
    def cubic(p: np.ndarray) -> np.ndarray:
        return (p[:, 0] / 500) ** 3 - (p[:, 1] / 400) ** 2 * (p[:, 2] / 300) + 2

    values = cubic(NODES.points_um()).reshape(NODES.shape).astype(np.float32)
    found = to_voxels(spline_basis(NODES, VOXELS, 3), values)
    assert found == pytest.approx(cubic(VOXELS.points_um()).reshape(VOXELS.shape), abs=2e-4)


@pytest.mark.parametrize("degree", [1, 3])
def test_summing_to_nodes_is_the_transpose_of_interpolating(degree: int) -> None:
    """<B u, v> = <u, B' v> for any u and v."""
    rng = np.random.default_rng(1)
    basis = spline_basis(NODES, VOXELS, degree)
    u = rng.normal(size=NODES.shape).astype(np.float32)
    v = rng.normal(size=VOXELS.shape).astype(np.float32)
    assert float((to_voxels(basis, u) * v).sum()) == pytest.approx(float((u * to_nodes(basis, v)).sum()), rel=1e-4)


def test_the_solver_solves() -> None:
    """(S + R) d = right to the solver's tolerance, d zero on the outer nodes."""
    rng = np.random.default_rng(2)
    prior = bending_prior(NODES, 1.0)
    roots = rng.normal(size=(3, 3, *NODES.shape)).astype(np.float32) * 0.02
    full = np.einsum("ki...,kj...->ij...", roots, roots)
    stiffness = tuple(full[i, j] for i, j in ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2)))
    right = rng.normal(size=(3, *NODES.shape)).astype(np.float32)
    d = prior.solve(stiffness, right, iterations=300)
    image = prior.times(d) + np.einsum("ij...,j...->i...", full, d)
    assert np.abs(image - right)[INNER].max() < 0.1 * np.abs(right).max()
    edge = np.ones(NODES.shape, bool)
    edge[1:-1, 1:-1, 1:-1] = False
    assert not d[:, edge].any()


def test_the_prior_alone_is_bending_energy() -> None:
    """u' R u of a sine is the mean square of its Laplacian: closed form for a product of sines."""
    n = NODES.shape
    axes = [np.sin(np.pi * np.arange(k) / (k - 1)) for k in n]
    u = np.zeros((3, *n), np.float32)
    u[0] = axes[0][:, None, None] * axes[1][None, :, None] * axes[2][None, None, :]
    waves = sum((2 - 2 * np.cos(np.pi / (k - 1))) / 0.2**2 for k in n)
    energy = float((u * bending_prior(NODES, 3.0).times(u)).sum())
    assert energy == pytest.approx(3.0 * waves**2 * 0.2**3 * 1e-4 * float((u**2).sum()), rel=1e-4)


def test_drawn_errors_have_the_posterior_covariance() -> None:
    """With a uniform stiffness the posterior is diagonal in the sine modes, so its trace is known."""
    prior = bending_prior(NODES, 1.0)
    s, zero = np.full(NODES.shape, 0.003, np.float32), np.zeros(NODES.shape, np.float32)
    stiffness = (s, zero, zero, s, zero, s)
    rng = np.random.default_rng(4)
    drawn = np.mean([np.mean(prior.draw(stiffness, rng)[INNER] ** 2) for _ in range(60)])
    assert drawn == pytest.approx(float(np.mean(1 / (prior.precision + 0.003))), rel=0.08)


def test_jacobian_of_a_stretch() -> None:
    """u = (0.1 x, -0.2 y, 0.05 z) multiplies volumes by 1.1 * 0.8 * 1.05."""
    p = NODES.points_um().reshape(*NODES.shape, 3)
    u = np.moveaxis(p * [0.1, -0.2, 0.05], -1, 0).astype(np.float32)
    assert jacobian(u, NODES.step_um) == pytest.approx(1.1 * 0.8 * 1.05, rel=1e-4)


def test_a_folded_displacement_is_unfolded_and_a_good_one_left_alone() -> None:
    folded, good = bump(600.0), bump(60.0)
    assert jacobian(folded, NODES.step_um).min() < 0
    assert jacobian(unfolded(folded, NODES.step_um, least=0.1), NODES.step_um).min() >= 0.1
    assert unfolded(good, NODES.step_um, least=0.1) is good


def test_the_inverse_undoes_the_displacement_at_its_nodes() -> None:
    from leadline.model.transform import Field

    u = bump(80.0)
    v = inverted(u / np.float32(NODES.step_um)) * np.float32(NODES.step_um)
    step = np.full(3, NODES.step_um)
    forth, back = (Field(np.moveaxis(x, 0, -1), step, NODES.origin_um) for x in (u, v))
    y = NODES.points_um()
    assert np.abs(forth(back(y)) - y).max() < 0.05

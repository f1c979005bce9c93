"""The true map: exact on grids, invertible, never folding; B-splines against scipy."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.interpolate import BSpline

from leadline.demo.recipe import Recipe, fine, hard, rough, small
from leadline.demo.tracks import border_shift, make_penetrations
from leadline.demo.warp import make_map, random_spline
from leadline.demo.write import invent


def test_spline_is_the_cardinal_cubic() -> None:
    """scipy.interpolate.BSpline.basis_element, tensor product."""
    rng = np.random.default_rng(3)
    spline = random_spline(rng, np.array([3000.0, 2000.0, 2500.0]), 700.0, 2, 100.0)
    points = rng.uniform(0, 1, (50, 3)) * [3000, 2000, 2500]
    bump = BSpline.basis_element(np.arange(5.0) - 2, extrapolate=False)
    weight = [
        np.nan_to_num(bump(points[:, [k]] / 700.0 + 1 - np.arange(spline.coefficients.shape[k]))) for k in range(3)
    ]
    expected = np.einsum("ni,nj,nk,ijkc->nc", *weight, spline.coefficients)
    np.testing.assert_allclose(spline(points), expected, atol=1e-9)
    grid = spline.on_grid(tuple(points[:4, k] for k in range(3)))
    np.testing.assert_allclose(np.array([grid[i, i, i] for i in range(4)]), expected[:4], atol=1e-2)


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_map_and_inverse_undo_each_other_and_never_fold(seed: int) -> None:
    made = invent(fine(hard(Recipe(seed=seed))))
    q = np.random.default_rng(seed).uniform(0.1, 0.9, (400, 3)) * np.asarray(made.frame.pir_shape) * 25
    p = made.chart(q)
    np.testing.assert_allclose(made.chart.inverse(p), q, atol=0.02)
    step = [(made.chart(q + e) - made.chart(q - e)) / 2 for e in np.eye(3)]
    assert np.linalg.det(np.stack(step, axis=-1)).min() > 0.4


def test_grid_and_scattered_points_agree() -> None:
    made = invent(fine(small(Recipe())))
    axes = tuple(np.linspace(500.0, 7000.0, 5) for _ in range(3))
    mesh = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    np.testing.assert_allclose(made.chart.on_grid(axes).reshape(-1, 3), made.chart(mesh), atol=0.05)


def test_a_dent_pushes_tissue_along_the_track() -> None:
    recipe = replace(Recipe(), dent_um=70.0)
    chords = (make_penetrations(recipe)[0].chord_um,)
    (plain, _), (dented, _) = make_map(replace(recipe, dent_um=0.0), chords), make_map(recipe, chords)
    (dent,) = dented.dents
    moved = dented.inverse(plain(dent.entry_um[None])) - dent.entry_um
    assert moved[0] @ dent.direction == pytest.approx(70.0, abs=6.0)


def test_borders_of_the_animal_shift_by_what_the_recipe_says() -> None:
    points = np.random.default_rng(0).uniform(1000, 6000, (4000, 3))
    shift = border_shift(rough(Recipe()))(points) - points
    assert shift.std() == pytest.approx(35.0, rel=0.25)
    assert np.abs(border_shift(Recipe())(points) - points).max() == 0

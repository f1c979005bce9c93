"""Averaging onto isotropic grids, and the way back from PIR um to stack um."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.model.frames import ALL_CODES, as_pir
from leadline.model.volume import Volume
from leadline.registration.grids import Grid, halve, on_isotropic_grid, pir_to_stack


@pytest.mark.parametrize("code", ALL_CODES)
def test_pir_um_and_stack_um_name_the_same_voxel_for_every_code(code: str) -> None:
    """A marked voxel, found in the PIR view and carried by the affine, is the marked voxel of the stored array."""
    data = np.zeros((4, 5, 6))
    data[1, 3, 2] = 1
    volume = Volume(data, np.array([10.0, 20.0, 30.0]), code, np.array([5.0, -3.0, 2.0]))
    pir = volume.as_pir()
    where = np.argwhere(pir.array() == 1) * pir.voxel_um
    assert pir_to_stack(volume)(where) == pytest.approx(volume.points(np.array([[1.0, 3, 2]])))


@given(
    voxel=st.tuples(*[st.floats(12.0, 90.0)] * 3),
    code=st.sampled_from(ALL_CODES),
    slope=st.tuples(*[st.floats(-2.0, 2.0)] * 3),
)
@settings(max_examples=40, deadline=None)
def test_a_ramp_stays_a_ramp_on_the_isotropic_grid(
    voxel: tuple[float, float, float], code: str, slope: tuple[float, float, float]
) -> None:
    """Averaging over cubes keeps a linear image: the grid's coordinates are where its values belong.

    A piecewise constant input differs from the ramp by less than half a voxel at the cube's faces.
    """
    data = np.ones((12, 13, 14))
    volume = Volume(data, np.array(voxel), code)
    pir = volume.as_pir()
    nodes = np.stack(np.meshgrid(*[np.arange(n) for n in pir.shape], indexing="ij"), -1) * pir.voxel_um
    ramp = Volume(nodes @ np.array(slope), pir.voxel_um, "PIR")
    found, grid = on_isotropic_grid(ramp, 100.0)
    want = (grid.points_um() @ np.array(slope)).reshape(grid.shape)
    inside = tuple(slice(1, -1) for _ in range(3))
    if all(n > 2 for n in grid.shape):
        bound = 0.5 * float(np.abs(slope) @ (pir.voxel_um**2 / 100.0)) + 1e-2
        assert np.abs(found - want)[inside].max() <= bound


def test_the_mean_is_kept() -> None:
    """Whole cubes: the mean of the averaged volume is the mean of the voxels."""
    data = np.random.default_rng(3).normal(size=(8, 12, 20)).astype(np.float32)
    volume = Volume(data, np.array([25.0, 50.0, 10.0]), "RAS")
    found, grid = on_isotropic_grid(volume, 100.0)
    assert found.shape == grid.shape == as_pir(np.zeros((2, 6, 2)), "RAS").shape
    assert found.mean() == pytest.approx(data.mean(), abs=1e-6)


def test_halving_keeps_the_place_of_a_ramp() -> None:
    grid = Grid((6, 8, 4), 50.0, np.array([10.0, 20.0, 30.0]))
    ramp = (grid.points_um() @ [1.0, 2.0, 3.0]).reshape(grid.shape)
    half = grid.halved()
    assert halve(ramp) == pytest.approx((half.points_um() @ [1.0, 2.0, 3.0]).reshape(half.shape), rel=1e-5)


def test_a_cropped_grid_holds_the_box_and_cuts_the_same_nodes() -> None:
    grid = Grid((10, 10, 10), 100.0, np.zeros(3))
    part, cut = grid.cropped(np.array([250.0, -80.0, 300.0]), np.array([650.0, 430.0, 5000.0]))
    assert part.origin_um.tolist() == [200.0, 0.0, 300.0]
    assert part.shape == (6, 6, 7)
    assert np.zeros(grid.shape)[cut].shape == part.shape

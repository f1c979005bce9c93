"""Local comparison of two images: sign and size of the step, indifference to brightness, what is not believed."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.ndimage import gaussian_filter, shift

from leadline.model.transform import IDENTITY
from leadline.registration.grids import Grid
from leadline.registration.matching import Evidence, believable, compare, pulled, still, target
from leadline.registration.prepare import Image

STEP_UM = 100.0


def texture(seed: int = 0) -> np.ndarray:
    return np.asarray(gaussian_filter(np.random.default_rng(seed).normal(size=(24, 22, 20)), 2.0) * 12, np.float32)


@given(
    move=st.tuples(*[st.floats(-40.0, 40.0)] * 3),
    gain=st.floats(0.5, 2.0),
    offset=st.floats(-1.0, 1.0),
    turned=st.booleans(),
)
@settings(max_examples=15, deadline=None)
def test_the_step_finds_a_small_shift_whatever_the_brightness(
    move: tuple[float, float, float], gain: float, offset: float, turned: bool
) -> None:
    """One Gauss-Newton step over the whole image finds a shift of under half a voxel to a quarter of a voxel, also
    where the contrast is reversed."""
    fixed = texture()
    moved = shift(fixed, np.array(move) / STEP_UM, order=3, mode="nearest")
    moved = np.asarray(offset + (-gain if turned else gain) * moved, np.float32)
    weight = np.zeros(fixed.shape, np.float32)
    weight[4:-4, 4:-4, 4:-4] = 1
    evidence = compare(fixed, moved, weight, step_um=STEP_UM)
    assert whole_step_um(evidence) == pytest.approx(np.array(move), abs=0.25 * STEP_UM)
    assert evidence.agreement * (-1 if turned else 1) > 0.4


def whole_step_um(evidence: Evidence) -> np.ndarray:
    """The shift of the whole image that the voxels together ask for."""
    xx, xy, xz, yy, yz, zz = (float(s.sum()) for s in evidence.stiffness)
    normal = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
    return np.asarray(np.linalg.solve(normal, [float(f.sum()) for f in evidence.force]))


def test_equal_images_ask_for_no_step() -> None:
    fixed = texture()
    evidence = compare(fixed, fixed, np.ones(fixed.shape, np.float32), step_um=STEP_UM)
    assert np.abs(whole_step_um(evidence)).max() < 0.02 * STEP_UM
    assert evidence.agreement > 0.7


def ball(missing: bool = False, debris: bool = False) -> Image:
    grid = Grid((40, 40, 40), STEP_UM, np.zeros(3))
    far = np.linalg.norm(grid.points_um() - grid.middle_um, axis=1).reshape(grid.shape)
    tissue = far < 1300
    if missing:
        tissue &= np.linalg.norm(grid.points_um() - [1950, 1950, 2600], axis=1).reshape(grid.shape) > 550
    if debris:
        tissue[2:6, 2:6, 2:6] = True
    return Image(tissue.astype(np.float32), tissue.astype(np.float32), np.ones(grid.shape, np.float32), grid)


def test_a_hole_and_debris_are_not_believed_but_the_surface_is() -> None:
    goal = target(ball())
    grid = goal.image.grid
    whole = believable(goal, ball(), IDENTITY, still(grid), tolerance_um=300.0)
    assert whole[20, 20, 33] == 1
    assert whole[20, 20, 26] == 1
    holed = believable(goal, ball(missing=True), IDENTITY, still(grid), tolerance_um=300.0)
    assert holed[20, 20, 26] == 0
    assert holed[20, 20, 7] == 1
    littered = believable(goal, ball(debris=True), IDENTITY, still(grid), tolerance_um=300.0)
    assert littered[4, 4, 4] == 0


def test_pulling_reads_linearly_through_affine_and_displacement() -> None:
    """A ramp is reproduced exactly; outside the image is 0."""
    source = Grid((12, 14, 16), 50.0, np.array([10.0, 20.0, 30.0]))
    ramp = (source.points_um() @ [0.1, 0.2, 0.3]).reshape(source.shape).astype(np.float32)
    goal = Grid((4, 4, 4), 100.0, np.array([60.0, 70.0, 80.0]))
    u = tuple(np.full(goal.shape, 0.25, np.float32) for _ in range(3))
    found = pulled(ramp, source, goal, IDENTITY, (u[0], u[1], u[2]))
    assert found == pytest.approx(((goal.points_um() + 25.0) @ [0.1, 0.2, 0.3]).reshape(goal.shape), rel=1e-4)
    away = Grid((2, 2, 2), 100.0, np.array([5000.0, 0.0, 0.0]))
    assert not pulled(ramp, source, away, IDENTITY, still(away)).any()

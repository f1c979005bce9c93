"""Orientation codes and affines against nibabel 5 (``nibabel.orientations``), all 48 codes."""

from __future__ import annotations

import numpy as np
import pytest
from nibabel import orientations as nib

from leadline.model.frames import ALL_CODES, as_pir, axes_matrix, from_pir, voxel_as_pir
from leadline.model.volume import Volume
from leadline.registration.grids import pir_to_stack

PIR_IN_RAS = np.array([[0.0, 0, 1], [-1, 0, 0], [0, -1, 0]])  # columns: ap, dv, ml as RAS directions


def ras_affine(code: str, voxel_um: np.ndarray) -> np.ndarray:
    """nibabel's affine (index to RAS) of an array stored as ``code`` with its first voxel at the origin."""
    ornt = nib.axcodes2ornt(tuple(code))
    affine = np.zeros((4, 4))
    for index_axis, (world_axis, sign) in enumerate(ornt):
        affine[int(world_axis), index_axis] = sign * voxel_um[index_axis]
    affine[3, 3] = 1
    return affine


def test_the_codes_are_nibabels() -> None:
    """Every code is one that nibabel reads back from the affine that it implies, and there are 48."""
    assert len(set(ALL_CODES)) == 48
    for code in ALL_CODES:
        assert "".join(nib.aff2axcodes(ras_affine(code, np.ones(3)))) == code


@pytest.mark.parametrize("code", ALL_CODES)
def test_axes_are_those_of_nibabels_affine(code: str) -> None:
    """The signed permutation to (ap, dv, ml) is nibabel's index-to-RAS affine seen in atlas axes."""
    assert np.array_equal(PIR_IN_RAS @ axes_matrix(code), ras_affine(code, np.ones(3))[:3, :3])


@pytest.mark.parametrize("code", ALL_CODES)
def test_reordering_is_nibabels_apply_orientation(code: str) -> None:
    """as_pir equals nibabel's ornt_transform and apply_orientation to PIR, and from_pir undoes it."""
    data = np.arange(2 * 3 * 4).reshape(2, 3, 4)
    way = nib.ornt_transform(nib.axcodes2ornt(tuple(code)), nib.axcodes2ornt(("P", "I", "R")))
    assert np.array_equal(as_pir(data, code), nib.apply_orientation(data, way))
    assert np.array_equal(from_pir(as_pir(data, code), code), data)


@pytest.mark.parametrize("code", ALL_CODES)
def test_pir_um_to_stack_um_is_nibabels_inverse_affine(code: str) -> None:
    """Index of the reordered array to index of the stored one: nibabel's inv_ornt_aff, scaled to um."""
    data, voxel = np.zeros((5, 6, 7)), np.array([10.0, 20.0, 40.0])
    volume = Volume(data, voxel, code)
    way = nib.ornt_transform(nib.axcodes2ornt(tuple(code)), nib.axcodes2ornt(("P", "I", "R")))
    to_stored = nib.inv_ornt_aff(way, data.shape)
    pir_index = np.random.default_rng(1).uniform(0, 4, (20, 3))
    stored = pir_index @ to_stored[:3, :3].T + to_stored[:3, 3]
    found = pir_to_stack(volume)(pir_index * voxel_as_pir(voxel, code))
    assert found == pytest.approx(stored * voxel)

"""A real brain, moved by a known transform and found again.

Source: the ICBM 152 2009a non-linear symmetric T1 average without skull, 1 mm, as packaged with nilearn
(``nilearn/datasets/data``); Fonov et al. (2011), NeuroImage 54, 313. doi:10.1016/j.neuroimage.2010.07.033. A human
brain stands in for a cleared one: its millimetres are read as tenths of one, so 2 mm voxels become 200 um.
"""

from __future__ import annotations

from importlib.resources import files

import nibabel as nib
import numpy as np
from scipy.ndimage import gaussian_filter, map_coordinates
from scipy.spatial.transform import Rotation

from leadline.model.frames import as_pir, from_pir
from leadline.model.settings import RegisterSettings
from leadline.model.volume import Volume
from leadline.registration.grids import pir_to_stack
from leadline.registration.stage import register

VOXEL_UM = 200.0


def packaged() -> np.ndarray:
    """The packaged T1 without skull, smoothed and thinned from 1 to 2 mm, laid out as PIR."""
    name = "mni_icbm152_t1_tal_nlin_sym_09a_converted.nii.gz"
    image = nib.load(str(files("nilearn") / "datasets" / "data" / name))  # type: ignore[attr-defined]
    data = as_pir(np.asarray(image.dataobj, np.float32), "".join(nib.aff2axcodes(image.affine)))
    assert image.header.get_zooms() == (1.0, 1.0, 1.0)
    return np.ascontiguousarray(gaussian_filter(data, 0.8)[::2, ::2, ::2])


def test_a_known_transform_of_a_real_brain_is_recovered() -> None:
    """Tilt, shrinkage and a smooth deformation of up to 300 um: within the house's bars, median 0.6 voxel and 95th
    percentile 1.6 voxels, and no fold.

    The contrast is bent (square root) and noise of 3 % added; the labels know but one region.
    """
    code, tilt_deg = "LIP", 22.0
    brain = packaged()
    tissue = brain > 0.1 * brain.max()
    brain = np.where(tissue, brain, 0.0)
    rng = np.random.default_rng(8)
    axis = rng.normal(size=3)
    turn = Rotation.from_rotvec(np.radians(tilt_deg) * axis / np.linalg.norm(axis)).as_matrix() / 0.94
    room = np.asarray(brain.shape) * VOXEL_UM
    shape = tuple(int(n * 1.15) for n in brain.shape)
    middle = np.asarray(shape) * VOXEL_UM / 2

    def to_atlas(q: np.ndarray) -> np.ndarray:
        wave = np.stack([np.sin(q[:, (k + 1) % 3] / 1500 + k) for k in range(3)], axis=1)
        return (q - middle + 175.0 * wave) @ turn.T + room / 2

    q = np.stack(np.meshgrid(*[np.arange(n) for n in shape], indexing="ij"), -1).reshape(-1, 3) * VOXEL_UM
    seen = map_coordinates(brain, to_atlas(q).T / VOXEL_UM, order=1, mode="constant", cval=0.0).reshape(shape)
    seen = 1000 * np.sqrt(np.clip(seen / brain.max(), 0, 1))
    seen = np.clip(seen + rng.normal(100, 30, shape), 0, None).astype(np.uint16)
    stack = Volume(np.ascontiguousarray(from_pir(seen, code)), np.full(3, VOXEL_UM), code)
    template = Volume(brain, np.full(3, VOXEL_UM), "PIR")
    labels = Volume(tissue.astype(np.uint32), np.full(3, VOXEL_UM), "PIR")
    found = register(
        stack, template, labels, settings=RegisterSettings(resolution_um=VOXEL_UM, search_orientation=False)
    )
    points = q[rng.choice(len(q), 60000, replace=False)]
    nearest = np.clip(np.rint(to_atlas(points) / VOXEL_UM), 0, np.asarray(brain.shape) - 1).astype(int)
    points = points[tissue[tuple(nearest.T)]]
    assert len(points) > 5000
    error = np.linalg.norm(found.stack_to_atlas(pir_to_stack(stack)(points)) - to_atlas(points), axis=1) / VOXEL_UM
    assert np.median(error) < 0.6
    assert np.percentile(error, 95) < 1.6
    assert float(found.quality["jacobian_min"]) > 0  # type: ignore[arg-type]

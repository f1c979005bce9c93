"""The register stage: background stack and atlas in, a transform both ways out."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.progress import SILENT, Progress
from leadline.model.transform import Affine, Field, PointTransform, Registration
from leadline.registration import contrast, deformable, orient, quality
from leadline.registration.grids import halve
from leadline.registration.linear import refine_affine
from leadline.registration.matching import pulled, still, target
from leadline.registration.nodes import inverted
from leadline.registration.prepare import Image, Sample, nearest_labels, prepare_atlas, prepare_sample

if TYPE_CHECKING:
    from leadline.model.settings import RegisterSettings
    from leadline.model.volume import Volume
    from leadline.registration.orient import Start

FINE, WORK, COARSE, FIRST = 0, 1, 2, 3  # grids: half the working resolution, itself, twice, four times
AFFINE_STEPS = ((COARSE, 12, 400.0), (WORK, 4, 300.0))
FIELD_STEPS = ((COARSE, 4, 0.25), (WORK, 5, 0.4))
MATCHED_STEPS = ((WORK, 6, 0.5),)
SURE = 0.7


def register(
    background: Volume,
    template: Volume,
    labels: Volume,
    *,
    settings: RegisterSettings,
    dye: Volume | None = None,
    progress: Progress = SILENT,
    threads: int = 2,
) -> Registration:
    """Tie a stack to the atlas.

    Parameters
    ----------
    background : the autofluorescence channel, reduced to voxels of 25 to 50 um, with its orientation code.
    template, labels : PIR volumes on one grid; label 0 is outside the brain.
    dye : the dye channel on the background's grid; what it stains is not believed.
    threads : threads for the linear algebra.

    Raises LeadlineError when a volume shows no tissue or holds values that are not finite.
    """
    del threads
    progress.begin("register", 24)
    step = settings.resolution_um / 2
    sample = prepare_sample(background, dye, step_um=step, levels=4)
    atlas = prepare_atlas(template, labels, step_um=step, levels=4)
    progress.step(2)
    start, rival, codes = orient.search(
        target(atlas[FIRST]), sample.images[FIRST], background.code, other_codes=settings.search_orientation
    )
    affine = start.affine
    for level, iterations, tolerance_um in AFFINE_STEPS:
        affine, _ = refine_affine(
            target(atlas[level]), sample.images[level], affine, iterations=iterations, tolerance_um=tolerance_um
        )
    progress.step(3)
    field = deformable.undeformed(atlas[COARSE], 2 * settings.resolution_um)
    if settings.deformable:
        field = _deform(atlas, sample.images, labels, affine, field, progress)
    return _registration(atlas, sample, affine, field, start, rival, codes)


def _deform(
    atlas: tuple[Image, ...],
    sample: tuple[Image, ...],
    labels: Volume,
    affine: Affine,
    field: deformable.Deformation,
    progress: Progress,
) -> deformable.Deformation:
    for level, iterations, belief in FIELD_STEPS:
        field, _ = deformable.fit(
            atlas[level], sample[level], affine, field, belief=belief, iterations=iterations, progress=progress
        )
    matched = _matched(atlas, sample, labels, affine, field)
    for level, iterations, belief in MATCHED_STEPS:
        field, _ = deformable.fit(
            matched[level], sample[level], affine, field, belief=belief, iterations=iterations, progress=progress
        )
    return field


def _matched(
    atlas: tuple[Image, ...],
    sample: tuple[Image, ...],
    labels: Volume,
    affine: Affine,
    field: deformable.Deformation,
) -> tuple[Image, ...]:
    """The atlas with the sample's contrast, learnt on the finest grid and halved from there."""
    fine, seen = atlas[FINE], sample[FINE]
    rank = contrast.relabelled(nearest_labels(labels, fine.grid))
    shift = field.on(fine.grid)
    wanted = rank > 0
    moved = pulled(seen.intensity, seen.grid, fine.grid, affine, shift, wanted)
    sure = pulled(seen.trust * seen.tissue, seen.grid, fine.grid, affine, shift, wanted) > SURE
    intensity = contrast.matched_contrast(fine.intensity, rank, moved, sure)
    images = [replace(fine, intensity=intensity)]
    for image in atlas[1:]:
        images.append(replace(image, intensity=halve(images[-1].intensity)))
    return tuple(images)


def _registration(
    atlas: tuple[Image, ...],
    sample: Sample,
    affine: Affine,
    field: deformable.Deformation,
    start: Start,
    rival: Start | None,
    codes: int,
) -> Registration:
    goal, seen = target(atlas[WORK]), sample.images[WORK]
    before = quality.agreement(goal, seen, affine, still(goal.image.grid))
    after = quality.agreement(goal, seen, affine, field.on(goal.image.grid))
    jacobian = field.jacobian
    dense = field.refined()
    step = np.full(3, dense.nodes.step_um)
    forth = Field(np.moveaxis(dense.values, 0, -1), step, dense.nodes.origin_um)
    back = inverted(dense.values / np.float32(dense.nodes.step_um)) * np.float32(dense.nodes.step_um)
    last = sample.to_stack.after(affine)
    atlas_to_stack = PointTransform(field=forth, last=last)
    stack_to_atlas = PointTransform(first=last.inverse(), field=Field(np.moveaxis(back, 0, -1), step, forth.origin_um))
    error_um = 30.0
    numbers: dict[str, float | str | list[float]] = {
        "local_correlation_affine": before[0],
        "local_correlation": after[0],
        "correlation_affine": before[1],
        "correlation": after[1],
        "mask_dice_affine": before[2],
        "mask_dice": after[2],
        "jacobian_min": float(jacobian.min()),
        "jacobian_max": float(jacobian.max()),
        "error_um": error_um,
        "tilt_deg": orient.tilt_deg(affine),
        "codes_tried": float(codes),
        "orientation": start.code,
        "orientation_agreement": start.agreement,
        "working_voxel_um": goal.image.grid.step_um,
    }
    warnings = []
    if rival is not None:
        numbers |= {"best_other_orientation": rival.code, "best_other_agreement": rival.agreement}
        if rival.agreement > start.agreement + orient.CLEARLY_BETTER:
            warnings.append(
                f"The stored orientation {start.code} looks wrong: {rival.code} fits the atlas much better "
                f"(local correlation {rival.agreement:.2f} against {start.agreement:.2f}). {start.code} was kept; "
                f"if the stack was stored as {rival.code}, write that in brain.toml and run again."
            )
    return Registration(stack_to_atlas, atlas_to_stack, error_um, numbers, tuple(warnings))

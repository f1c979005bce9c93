"""The register stage: background stack and atlas in, a transform both ways out."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.progress import SILENT, Progress
from leadline.model.frames import mirrored
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

FINE, WORK = 0, 1  # grids of half the working resolution, and of itself; each further one is twice as coarse
SEARCH_UM, COARSE_UM = 400.0, 200.0
AFFINE_STEPS, AFFINE_WORK_STEPS = 12, 4
FIELD_COARSE_STEPS, FIELD_STEPS, MATCHED_STEPS = 4, 5, 6
BELIEF_COARSE, BELIEF, BELIEF_MATCHED = 0.25, 0.4, 0.5
SURE = 0.7
SEED = 1


def register(
    background: Volume,
    template: Volume,
    labels: Volume,
    *,
    settings: RegisterSettings,
    dye: Volume | None = None,
    progress: Progress = SILENT,
) -> Registration:
    """Tie a stack to the atlas.

    Parameters
    ----------
    background : the autofluorescence channel, reduced to voxels of 25 to 50 um, with its orientation code.
    template, labels : PIR volumes on one grid; label 0 is outside the brain.
    dye : the dye channel on the background's grid; what it stains is not believed.

    Raises LeadlineError when a volume shows no tissue or holds values that are not finite.
    """
    fine_um = settings.resolution_um / 2
    coarse, first = (max(WORK, round(np.log2(um / fine_um))) for um in (COARSE_UM, SEARCH_UM))
    progress.begin("register", 6 + _field_steps(coarse) if settings.deformable else 6)
    sample = prepare_sample(background, dye, step_um=fine_um, levels=first + 1)
    atlas = prepare_atlas(template, labels, step_um=fine_um, levels=first + 1)
    progress.step(3)
    start, rival, codes = orient.search(
        target(atlas[first]), sample.images[first], background.code, other_codes=settings.search_orientation
    )
    affine = _refined(atlas, sample.images, start.affine, coarse)
    progress.step(3)
    field = deformable.undeformed(atlas[coarse], 2 * settings.resolution_um)
    if settings.deformable:
        fitted = _deform(atlas, sample.images, labels, affine, field, coarse, progress)
        field, error_um = fitted.deformation, fitted.error_um(SEED)
    else:
        # what the affine leaves is what a deformation would find, and what that would not
        fitted = deformable.fit(
            atlas[coarse],
            sample.images[coarse],
            affine,
            field,
            belief=BELIEF,
            iterations=AFFINE_STEPS // 2,
            progress=SILENT,
            far=True,
        )
        error_um = float(np.hypot(fitted.error_um(SEED), fitted.size_um))
    return _registration(atlas, sample, affine, field, error_um, start, rival, codes)


def _refined(atlas: tuple[Image, ...], sample: tuple[Image, ...], affine: Affine, coarse: int) -> Affine:
    steps = [(coarse, AFFINE_STEPS, 400.0)] + ([(WORK, AFFINE_WORK_STEPS, 300.0)] if coarse > WORK else [])
    for level, iterations, tolerance_um in steps:
        affine, _ = refine_affine(
            target(atlas[level]), sample[level], affine, iterations=iterations, tolerance_um=tolerance_um
        )
    return affine


def _field_steps(coarse: int) -> int:
    return FIELD_STEPS + MATCHED_STEPS + (FIELD_COARSE_STEPS if coarse > WORK else 0)


def _deform(
    atlas: tuple[Image, ...],
    sample: tuple[Image, ...],
    labels: Volume,
    affine: Affine,
    field: deformable.Deformation,
    coarse: int,
    progress: Progress,
) -> deformable.Fit:
    steps = [(coarse, FIELD_COARSE_STEPS, BELIEF_COARSE)] if coarse > WORK else []
    for level, iterations, belief in [*steps, (WORK, FIELD_STEPS, BELIEF)]:
        field = deformable.fit(
            atlas[level],
            sample[level],
            affine,
            field,
            belief=belief,
            iterations=iterations,
            progress=progress,
            far=True,
        ).deformation
    matched = _matched(atlas, sample, labels, affine, field)[WORK]
    return deformable.fit(
        matched, sample[WORK], affine, field, belief=BELIEF_MATCHED, iterations=MATCHED_STEPS, progress=progress
    )


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
    intensity = contrast.matched_contrast(fine.intensity, rank, moved, sure, fine.grid)
    images = [replace(fine, intensity=intensity)]
    for image in atlas[1:]:
        images.append(replace(image, intensity=halve(images[-1].intensity)))
    return tuple(images)


def _registration(
    atlas: tuple[Image, ...],
    sample: Sample,
    affine: Affine,
    field: deformable.Deformation,
    error_um: float,
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
                f"if the stack was stored as {rival.code}, write that in brain.toml and run again. Images cannot tell "
                f"it from its mirror image {mirrored(rival.code)}: make sure of R and L by another way. If the stack's "
                "code is right, look at the atlas's."
            )
    return Registration(stack_to_atlas, atlas_to_stack, error_um, numbers, tuple(warnings))

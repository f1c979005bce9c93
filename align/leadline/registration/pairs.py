"""A registration corrected at places that a person has named in stack and atlas."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from leadline.base.arrays import BoolArray, FloatArray
from leadline.base.errors import LeadlineError
from leadline.model.transform import Affine, Field, PointTransform, Registration

REACH_UM = 2500.0
HAND_SD_UM = 30.0  # common practice, no source: how well a hand marks a place
ERROR_SD_UM = 150.0  # size of the errors that a person corrects
SPACING_UM = 200.0
ROUNDS = 40
MOST_UM = 0.4 * REACH_UM


@dataclass(frozen=True, slots=True, eq=False)
class PairErrors:
    """Distances ``(n,)`` um in the atlas at the pairs: before the correction, after it, and after a correction by all
    other pairs (the honest one: what it does where nobody has looked)."""

    before_um: FloatArray
    after_um: FloatArray
    left_out_um: FloatArray


def refined(registration: Registration, stack_um: FloatArray, atlas_um: FloatArray) -> Registration:
    """The registration bent so that ``stack_um`` (n, 3) falls on ``atlas_um`` (n, 3), less and less with distance.

    The displacement is a sum of compactly supported radial functions of 2.5 mm reach [1]_, fitted with the pairs'
    own error, so that two pairs that contradict each other meet half-way; beyond their reach nothing changes.

    Raises LeadlineError when a pair lies so far off that bending would fold the tissue.

    .. [1] Wendland (1995). Adv. Comput. Math. 4, 389. doi:10.1007/BF02123482 (the C2 function)
    """
    if not len(stack_um):
        return registration
    bend = _bend(registration.stack_to_atlas(stack_um), np.asarray(atlas_um, float))
    there, back = registration.stack_to_atlas, registration.atlas_to_stack
    around = np.concatenate([registration.stack_to_atlas(stack_um), atlas_um])
    forward = _with_field(
        there, around=there.last.inverse()(around), carry=lambda middle, old: bend(there.last(middle + old))
    )
    backward = _with_field(
        back,
        around=back.first(around),
        carry=lambda middle, _: back(_unbent(bend, back.first.inverse()(middle))),
    )
    return replace(registration, stack_to_atlas=forward, atlas_to_stack=backward)


def pair_errors(registration: Registration, stack_um: FloatArray, atlas_um: FloatArray) -> PairErrors:
    """How far the pairs lie apart before and after the correction that they make."""
    stack, atlas = np.asarray(stack_um, float), np.asarray(atlas_um, float)
    falls = registration.stack_to_atlas(stack)
    left_out = np.empty(len(stack))
    for k in range(len(stack)):
        others = np.arange(len(stack)) != k
        moved = _bend(falls[others], atlas[others])(falls[k : k + 1]) if others.any() else falls[k : k + 1]
        left_out[k] = np.linalg.norm(moved[0] - atlas[k])
    after = _bend(falls, atlas)(falls) if len(stack) else falls
    return PairErrors(
        np.asarray(np.linalg.norm(falls - atlas, axis=1), np.float64),
        np.asarray(np.linalg.norm(after - atlas, axis=1), np.float64),
        left_out,
    )


def _bend(falls_um: FloatArray, wanted_um: FloatArray) -> Callable[[FloatArray], FloatArray]:
    """A smooth map of atlas um that carries ``falls_um`` near ``wanted_um``."""
    push = wanted_um - falls_um
    furthest = float(np.linalg.norm(push, axis=1).max())
    if furthest > MOST_UM:
        raise LeadlineError(
            f"a pair lies {furthest:.0f} um off; a correction by hand reaches {MOST_UM:.0f} um",
            where="registration pairs",
            mend="Check that both points name the same place, or register again with another orientation",
        )
    kernel = _radial(falls_um, falls_um) + (HAND_SD_UM / ERROR_SD_UM) ** 2 * np.eye(len(falls_um))
    weight = np.linalg.solve(kernel, push)
    return lambda points: np.asarray(points + _radial(points, falls_um) @ weight, np.float64)


def _radial(a: FloatArray, b: FloatArray) -> FloatArray:
    t = np.clip(np.linalg.norm(a[:, None] - b[None], axis=-1) / REACH_UM, 0, 1)
    return np.asarray((1 - t) ** 4 * (4 * t + 1), np.float64)


def _unbent(bend: Callable[[FloatArray], FloatArray], points_um: FloatArray) -> FloatArray:
    """The inverse of a bend, by fixed-point iteration."""
    found = points_um.copy()
    for _ in range(ROUNDS):
        found = found + (points_um - bend(found))
    return found


def _with_field(
    transform: PointTransform, *, around: FloatArray, carry: Callable[[FloatArray, FloatArray], FloatArray]
) -> PointTransform:
    """``transform`` with a field whose nodes x are carried to ``carry(x, old displacement)`` by field and ``last``."""
    field = transform.field or _empty_field(around)
    shape = field.displacement_um.shape[:3]
    index = np.stack(np.meshgrid(*(np.arange(n) for n in shape), indexing="ij"), axis=-1).reshape(-1, 3)
    nodes = index * field.spacing_um + field.origin_um
    old = field.displacement_um.reshape(-1, 3).astype(float)
    inner = ((index > 0) & (index < np.asarray(shape) - 1)).all(axis=1)
    near = inner & _within_reach(nodes, around, transform.last, field)
    new = old.copy()
    new[near] = transform.last.inverse()(carry(nodes[near], old[near])) - nodes[near]
    return replace(transform, field=replace(field, displacement_um=new.reshape(*shape, 3)))


def _within_reach(nodes: FloatArray, around: FloatArray, last: Affine, field: Field) -> BoolArray:
    """Nodes that the bend may move; all others keep their displacement to the last bit."""
    scale = max(1.0, float(np.linalg.norm(np.linalg.inv(last.matrix), 2)))
    slack = float(np.abs(field.displacement_um).max()) * 2 + 2 * MOST_UM
    low, high = around.min(axis=0) - REACH_UM * scale - slack, around.max(axis=0) + REACH_UM * scale + slack
    return np.asarray(((nodes >= low) & (nodes <= high)).all(axis=1), np.bool_)


def _empty_field(around: FloatArray) -> Field:
    """A field of no displacement, wide enough for a bend about ``around``."""
    margin = REACH_UM + 2 * MOST_UM
    low, high = around.min(axis=0) - margin, around.max(axis=0) + margin
    shape = np.ceil((high - low) / SPACING_UM).astype(int) + 1
    return Field(np.zeros((*shape, 3)), np.full(3, SPACING_UM), low)

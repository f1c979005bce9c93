"""Whether a registration can be true: the brain's size along the stored axes, and how alike sample and atlas are."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from leadline.base.arrays import FloatArray
    from leadline.model.transform import Registration

# common practice, no source: clearing shrinks brains to 0.7 or swells them to 1.3, and nearly alike along all axes
SIZE = (0.72, 1.3)
UNEVEN = 1.17
UNLIKE = 0.28  # good invented brains reach 0.31 before a deformation and 0.40 after it


def sizes(registration: Registration) -> FloatArray:
    """Size ``(3,)`` of the brain along the stored axes of the stack, over the atlas's; a tilt does not change it."""
    return np.asarray(np.linalg.norm(registration.atlas_to_stack.last.matrix, axis=1), np.float64)


def doubts(registration: Registration) -> tuple[str, ...]:
    """Sentences about a registration as the images alone gave it: odd size, uneven size, little likeness."""
    size = sizes(registration)
    told = ", ".join(f"{s:.2f}" for s in size)
    whole = float(np.median(size))
    out = []
    if not SIZE[0] <= whole <= SIZE[1]:
        out.append(
            f"the brain measures {whole:.2f} of the atlas's ({told} along the stored axes). Some clearing shrinks or "
            "swells tissue so far; if yours does not, voxel_um of the stack, or the atlas, is wrong by a factor of "
            f"about {max(whole, 1 / whole):.1f}"
        )
    if size.max() / size.min() > UNEVEN:
        odd = int(np.abs(np.log(size / whole)).argmax())
        out.append(
            f"the brain has not shrunk alike along the stored axes ({told} of the atlas's): look at voxel_um of axis "
            f"{odd}, about {size[odd] / whole:.2f} times what it should be, and at the order of the sizes"
        )
    likeness = float(registration.quality["local_correlation"])  # type: ignore[arg-type]
    if likeness < UNLIKE:
        out.append(
            f"sample and atlas are little alike (local correlation {likeness:.2f}; brains of the "
            f"atlas's kind and age reach more than {UNLIKE:g}): look at qc.png, and whether channel, "
            "orientation and atlas (kind, age) are the right ones"
        )
    return tuple(out)

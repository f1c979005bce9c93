"""Cortical depth: a coordinate from pia (0) to white matter (1), and layers from it only where someone asks for them.

The coordinate is the solution of Laplace's equation between the two surfaces: every point of cortex lies on one
equipotential, and depth is even where the surfaces are parallel planes. It is not depth along a track, which crosses
the layers at an angle.

References
----------
Jones, Buchbinder & Aharon (2000), Hum. Brain Mapp. 11, 12.
doi:10.1002/1097-0193(200009)11:1<12::AID-HBM20>3.0.CO;2-K
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, BoolArray, Float32Array, FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError, nearest

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.model.atlas import Atlas, Structures

GRID_UM = 50.0
TOLERANCE = 1e-6
_CORTICAL_LAYER = re.compile(r"[1-6]")
_CORTEX = re.compile(r"\b(isocortex|neocortex|cerebral cortex|cortical plate)\b", re.IGNORECASE)
# Published mean layer borders as fractions of the depth from pia to white matter: (layer, its lower border).
# Mouse visual cortex: 115.11, 333.47, 453.62, 687.65, 883.13 and 922.59 um, the constants
# DEFAULT_MOUSE_ME_MET_REFERENCE_LAYER_DEPTHS of the library neuron-morphology 1.2.2 (read there, and compared).
# Mouse barrel cortex (C2): 128, 269, 418, 588, 708, 890 and 1154 um, Lefort et al. (2009), Neuron 61, 301; from memory.
LAYER_SETS: dict[str, tuple[tuple[str, float], ...]] = {
    "mouse visual cortex": (
        ("1", 0.1248), ("2/3", 0.3614), ("4", 0.4917), ("5", 0.7454), ("6a", 0.9572), ("6b", 1.0),
    ),
    "mouse barrel cortex": (
        ("1", 0.1109), ("2", 0.2331), ("3", 0.3622), ("4", 0.5095), ("5a", 0.6135), ("5b", 0.7712), ("6", 1.0),
    ),
}  # fmt: skip
FROM_ATLAS, NO_LAYER, OUTERMOST = "atlas", "", "1"


@dataclass(frozen=True, slots=True, eq=False)
class CorticalDepth:
    """The coordinate on a grid. ``values`` : (AP, DV, ML) float32 from 0 at the pia to 1 at the white matter, NaN
    outside cortex and where cortex meets only one of the two. ``voxel_um``, ``origin_um`` : (3,) of the grid."""

    values: Float32Array
    voxel_um: FloatArray
    origin_um: FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "values", frozen(self.values, np.float32))
        object.__setattr__(self, "voxel_um", frozen_vector(self.voxel_um, "voxel_um", length=3))
        object.__setattr__(self, "origin_um", frozen_vector(self.origin_um, "origin_um", length=3))

    def at(self, points_um: FloatArray) -> FloatArray:
        """Cortical depth ``(n,)`` at atlas points ``(n, 3)``: linear between the grid's points in cortex, NaN where
        none of the eight about a point is."""
        from scipy.ndimage import map_coordinates

        index = ((np.asarray(points_um, float) - self.origin_um) / self.voxel_um).T
        known = np.isfinite(self.values)
        filled = np.where(known, self.values, 0.0).astype(np.float32)
        total = map_coordinates(filled, index, order=1, mode="constant", cval=0.0, output=np.float64)
        weight = map_coordinates(known.astype(np.float32), index, order=1, mode="constant", cval=0.0, output=np.float64)
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(weight > 1e-6, np.clip(total / weight, 0.0, 1.0), np.nan)


def cortex_ids(structures: Structures) -> tuple[int, ...]:
    """Structures that are cortex: those with a cortical layer, or, in an atlas without layers, what lies under a
    structure named isocortex, neocortex, cerebral cortex or cortical plate."""
    grey = [row for row in structures.rows if row.tissue == "grey"]
    layered = tuple(row.id for row in grey if _CORTICAL_LAYER.match(row.layer))
    if layered:
        return layered
    return tuple(row.id for row in grey if any(_CORTEX.search(step.name) for step in structures.ancestry(row.id)))


def cortical_depth(atlas: Atlas, *, grid_um: float = GRID_UM) -> CorticalDepth:
    """Solve for the cortical depth of an atlas.

    The pia is where cortex meets the outside, and where the two hemispheres' outermost layers touch (in an atlas
    without layers, where their cortices touch); the white matter is where it meets white matter. Elsewhere
    (ventricles, other grey matter) nothing flows.

    Raises LeadlineError when the atlas names no cortex, or its cortex meets no outside or no white matter.
    """
    ids = cortex_ids(atlas.structures)
    if not ids:
        raise LeadlineError(
            "no structure is cortex", where=f"atlas {atlas.name}", mend="Fill the column 'layer' of structures.csv"
        )
    step = np.maximum(np.rint(grid_um / atlas.voxel_um).astype(int), 1)
    labels = np.asarray(atlas.labels.data[:: step[0], :: step[1], :: step[2]])
    white = [row.id for row in atlas.structures.rows if row.tissue == "white"]
    outside = [0, *(row.id for row in atlas.structures.rows if row.tissue == "outside")]
    cortex = np.isin(labels, ids)
    outer = [row.id for row in atlas.structures.rows if row.id in ids and row.layer == OUTERMOST]
    values = solve(
        cortex,
        np.isin(labels, outside),
        np.isin(labels, white),
        atlas.voxel_um * step,
        midline=_midline(labels != 0),
        medial=np.isin(labels, outer) if outer else cortex,
    )
    if not np.isfinite(values).any():
        raise LeadlineError(
            "its cortex does not lie between the outside and white matter",
            where=f"atlas {atlas.name}",
            mend="Fill the column 'tissue' of structures.csv (white)",
        )
    return CorticalDepth(values, atlas.voxel_um * step, np.zeros(3))


def solve(
    cortex: BoolArray,
    outside: BoolArray,
    white: BoolArray,
    voxel_um: FloatArray,
    *,
    midline: int | None = None,
    medial: BoolArray | None = None,
) -> Float32Array:
    """Laplace's equation in ``cortex``: 0 on its faces to ``outside``, 1 on its faces to ``white``, no flow elsewhere.

    Finite volumes on the voxels, the surfaces lying on their faces. ``midline`` : the first index along the last axis
    of the right hemisphere; faces across it between two voxels of ``medial`` (cortex, where not given) are pia. NaN
    outside cortex and in pieces of it that do not meet both surfaces.
    """
    from scipy.sparse import diags
    from scipy.sparse.linalg import cg

    pial = _medial_faces(cortex if medial is None else medial & cortex, midline)
    cortex = cortex & _between_both(cortex, outside, white, pial)
    values = np.full(cortex.shape, np.nan, np.float32)
    n = int(cortex.sum())
    if not n:
        return values
    number = np.full(cortex.shape, -1, np.int64)
    number[cortex] = np.arange(n)
    matrix, right = _equations(number, outside, white, pial, voxel_um)
    jacobi = diags(1.0 / matrix.diagonal())
    solution, failed = cg(matrix, right, x0=np.full(n, 0.5), rtol=TOLERANCE, M=jacobi, maxiter=5000)
    if failed:
        raise RuntimeError("Laplace's equation in the atlas' cortex did not converge")
    values[cortex] = np.clip(solution, 0.0, 1.0)
    return values


def _equations(
    number: IntArray, outside: BoolArray, white: BoolArray, pial: BoolArray, voxel_um: FloatArray
) -> tuple[Any, FloatArray]:
    """Matrix and right side: all that flows over a voxel's faces is nothing. ``number`` : -1 outside cortex."""
    from scipy.sparse import coo_matrix

    n = int(number.max()) + 1
    diagonal, right = np.zeros(n), np.zeros(n)
    rows, columns, weights = [np.arange(n)], [np.arange(n)], [diagonal]
    for axis in range(3):
        conductance = float(voxel_um.min() / voxel_um[axis]) ** 2
        low, high = _faces(number, axis), _faces(number, axis, upper=True)
        both = (low >= 0) & (high >= 0)
        if axis == 2:
            for side in (low, high):
                np.add.at(diagonal, side[both & pial], 2 * conductance)
            both &= ~pial
        i, j = low[both], high[both]
        for one, two in ((i, j), (j, i)):
            np.add.at(diagonal, one, conductance)
            rows.append(one)
            columns.append(two)
            weights.append(np.full(len(one), -conductance))
        for inner, across in ((low, True), (high, False)):
            for surface, level in ((outside, 0.0), (white, 1.0)):  # half a voxel away: twice the conductance
                face = (inner >= 0) & _faces(surface, axis, upper=across)
                np.add.at(diagonal, inner[face], 2 * conductance)
                np.add.at(right, inner[face], 2 * conductance * level)
    entries = np.concatenate(weights)
    return coo_matrix((entries, (np.concatenate(rows), np.concatenate(columns)))).tocsr(), right


def _faces(array: AnyArray, axis: int, *, upper: bool = False) -> AnyArray:
    """What lies below (or above) every inner face along ``axis``."""
    cut = [slice(None)] * 3
    cut[axis] = slice(1, None) if upper else slice(None, -1)
    return array[tuple(cut)]


def _medial_faces(medial: BoolArray, midline: int | None) -> BoolArray:
    """Faces along ML, between two voxels of ``medial``, at which the hemispheres touch."""
    found = np.zeros((*medial.shape[:2], medial.shape[2] - 1), bool)
    if midline is not None:
        found[:, :, midline - 1] = medial[:, :, midline - 1] & medial[:, :, midline]
    return found


def _between_both(cortex: BoolArray, outside: BoolArray, white: BoolArray, pial: BoolArray) -> BoolArray:
    """The connected pieces of cortex that meet the outside (or the other hemisphere) and the white matter."""
    from scipy.ndimage import binary_dilation, label

    pieces, count = label(cortex)
    meets = [
        np.bincount(pieces[cortex & binary_dilation(surface)], minlength=count + 1) > 0 for surface in (outside, white)
    ]
    touching = np.pad(pial, ((0, 0), (0, 0), (0, 1))) | np.pad(pial, ((0, 0), (0, 0), (1, 0)))
    meets[0] |= np.bincount(pieces[cortex & touching], minlength=count + 1) > 0
    good = meets[0] & meets[1]
    good[0] = False
    return np.asarray(good[pieces])


def _midline(brain: BoolArray) -> int | None:
    """First index of the right half along ML; None where the volume is a single hemisphere or is not halved."""
    where = np.flatnonzero(brain.any(axis=(0, 1)))
    if not where.size:
        return None
    middle = (int(where[0]) + int(where[-1]) + 1) / 2
    index = round(middle)
    left, right = brain[:, :, :index][:, :, ::-1], brain[:, :, index:]
    depth = min(left.shape[2], right.shape[2])
    shared = np.logical_and(left[:, :, :depth], right[:, :, :depth]).sum()
    total = np.logical_or(left[:, :, :depth], right[:, :, :depth]).sum()
    return index if total and shared / total > 0.8 else None


def depth_columns(
    points_um: FloatArray,
    region_id: IntArray,
    layer: Sequence[str],
    depth: CorticalDepth,
    structures: Structures,
    chosen: Sequence[tuple[str, str]] = (),
) -> tuple[FloatArray, tuple[str, ...], tuple[str, ...]]:
    """What channels and units get appended: ``cortical_depth`` (n,), ``layer`` and ``layer_source`` (n,) texts.

    ``points_um`` : (n, 3) atlas um, NaN where not located. ``region_id``, ``layer`` : (n,) by the atlas. Depth is NaN
    outside cortex. Layers stay the atlas' (``layer_source`` 'atlas'); where it has none in cortex, they are those of
    the set of :data:`LAYER_SETS` that was ``chosen``, in pairs (acronym, name of the set), for the structure or the
    nearest that holds it (``layer_source`` 'fractions: NAME'), and none otherwise.
    """
    ids = np.array(cortex_ids(structures))
    located = np.isfinite(points_um).all(axis=1) & np.isin(region_id, ids)
    found = np.full(len(points_um), np.nan)
    if located.any():
        found[located] = depth.at(points_um[located])
    layers, sources = list(layer), [FROM_ATLAS if name else NO_LAYER for name in layer]
    set_of = dict(chosen)
    for row in np.flatnonzero(np.isfinite(found)) if set_of else ():
        above = (set_of.get(step.acronym) for step in structures.ancestry(int(region_id[row])))
        name = next(filter(None, above), None)
        if name is not None and not layers[row]:
            layers[row] = layer_at(float(found[row]), LAYER_SETS[name])
            sources[row] = f"fractions: {name}"
    return found, tuple(layers), tuple(sources)


def require_chosen(chosen: Sequence[tuple[str, str]], structures: Structures) -> None:
    """Raises LeadlineError, naming the nearest, for a structure or a set that there is not."""
    acronyms = [row.acronym for row in structures.rows]
    for acronym, name in chosen:
        for what, word, known in (("structure", acronym, acronyms), ("set of layer fractions", name, list(LAYER_SETS))):
            if word not in known:
                raise LeadlineError(
                    f"there is no {what} '{word}'",
                    where="brain.toml, [settings], [locate], layer_fractions",
                    mend=nearest(word, known),
                )


def layer_at(depth: float, fractions: Sequence[tuple[str, float]]) -> str:
    """Layer at a cortical depth; ``fractions`` : (name, its lower border), ascending to 1.

    Examples
    --------
    >>> layer_at(0.43, LAYER_SETS["mouse visual cortex"])
    '4'
    """
    borders = [border for _, border in fractions]
    return fractions[min(int(np.searchsorted(borders, depth)), len(borders) - 1)][0]

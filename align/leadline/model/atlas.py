"""A labelled reference atlas: label volume, template and the tree of structures."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray, IntArray
from leadline.base.errors import LeadlineError
from leadline.model.volume import Volume

OUTSIDE_ID = 0
OUTSIDE = "outside"
TISSUES = ("grey", "white", "ventricle", "outside")


@dataclass(frozen=True, slots=True)
class Structure:
    """One row of ``structures.csv``. ``parent_id`` is None at the root; ``layer`` is '' where it is no layer."""

    id: int
    acronym: str
    name: str
    parent_id: int | None
    colour: str = "#808080"
    layer: str = ""
    coarse: bool = False
    tissue: str = "grey"


OUTSIDE_STRUCTURE = Structure(OUTSIDE_ID, OUTSIDE, "outside the brain", None, "#000000", "", False, "outside")


@dataclass(frozen=True)
class Structures:
    """The structure table as a tree; ids are exact integers up to 2^32 - 1."""

    rows: tuple[Structure, ...]

    def __post_init__(self) -> None:
        for row in self.rows:
            if row.parent_id is not None and row.parent_id not in self.by_id:
                raise LeadlineError(
                    f"structure {row.id} ({row.acronym}) has parent {row.parent_id}, which has no row",
                    where="structures.csv",
                    mend="Add the parent's row or leave parent_id empty",
                )
        for row in self.rows:
            self.ancestry(row.id)

    @cached_property
    def by_id(self) -> dict[int, Structure]:
        """Structure of each id; 0 is outside the brain."""
        found: dict[int, Structure] = {OUTSIDE_ID: OUTSIDE_STRUCTURE}
        for row in self.rows:
            if row.id in found:
                raise LeadlineError(
                    f"id {row.id} has two rows" if row.id else "id 0 is kept for outside the brain",
                    where="structures.csv",
                    mend="Give every structure one row and an id of its own from 1 to 4294967295",
                )
            found[row.id] = row
        return found

    def __getitem__(self, structure_id: int) -> Structure:
        return self.by_id[int(structure_id)]

    def __contains__(self, structure_id: int) -> bool:
        return int(structure_id) in self.by_id

    def ancestry(self, structure_id: int) -> tuple[Structure, ...]:
        """The structure, its parent, and so on to the root."""
        chain: list[Structure] = []
        here: int | None = int(structure_id)
        while here is not None:
            row = self.by_id[here]
            if row in chain:
                raise LeadlineError(
                    f"structure {row.id} ({row.acronym}) is its own ancestor",
                    where="structures.csv",
                    mend="Correct the parent_id column",
                )
            chain.append(row)
            here = row.parent_id
        return tuple(chain)

    def coarse(self, structure_id: int) -> Structure:
        """Nearest ancestor (or itself) marked coarse; with no marks at all, itself, or for a layer its area."""
        chain = self.ancestry(structure_id)
        if self._has_marks:
            return next((row for row in chain if row.coarse), chain[0])
        if chain[0].layer and len(chain) > 1:
            return next((row for row in chain if not row.layer), chain[0])
        return chain[0]

    @cached_property
    def _has_marks(self) -> bool:
        return any(row.coarse for row in self.rows)


@dataclass(frozen=True, eq=False)
class Atlas:
    """Labels and template laid out as PIR, with the structures that the labels name.

    ``labels`` : (AP, DV, ML) uint32. ``template`` : same grid, any real type. ``bregma_um`` : (3,) in atlas um.
    """

    name: str
    labels: Volume
    template: Volume
    structures: Structures
    citation: str = ""
    licence: str = ""
    bregma_um: FloatArray | None = None
    extra: dict[str, str] = field(default_factory=dict)

    @property
    def voxel_um(self) -> FloatArray:
        """Voxel size of the label volume (ap, dv, ml)."""
        return self.labels.voxel_um

    def label_at(self, points_um: FloatArray) -> IntArray:
        """Structure id ``(n,)`` at atlas points ``(..., 3)``; 0 outside the volume."""
        points = np.asarray(points_um, float)
        index = np.rint(points / self.voxel_um).astype(np.int64)
        shape = np.asarray(self.labels.shape)
        inside = ((index >= 0) & (index < shape)).all(axis=-1)
        safe = np.clip(index, 0, shape - 1)
        found = np.asarray(self._label_array[safe[..., 0], safe[..., 1], safe[..., 2]]).astype(np.int64)
        return np.where(inside, found, OUTSIDE_ID)

    @cached_property
    def _label_array(self) -> AnyArray:
        return self.labels.data if isinstance(self.labels.data, np.ndarray) else self.labels.array()

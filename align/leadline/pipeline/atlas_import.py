"""``leadline atlas import`` and ``leadline atlas check``: from another's files to an atlas folder, and its check."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.model.atlas import OUTSIDE_ID, Atlas, Structures

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

Summary: TypeAlias = dict[str, Any]
"""What an atlas folder holds, by name; ``notes`` are sentences for the user."""


def import_atlas(
    labels: Path,
    template: Path,
    structures: Path,
    out: Path,
    *,
    name: str,
    citation: str = "",
    licence: str = "",
    orientation: str | None = None,
    voxel_um: Sequence[float] | None = None,
    bregma_um: Sequence[float] | None = None,
    progress: Progress = SILENT,
) -> Summary:
    """Build an atlas folder from a label volume, a template and a structure table.

    Parameters
    ----------
    structures : CSV with the usual columns, or JSON with ``children``.
    orientation, voxel_um : along the stored axes, only where the volumes do not carry them.
    bregma_um : (ap, dv, ml) in atlas um, where known.

    Raises
    ------
    LeadlineError : a file is wrong, the grids differ, or a label has no row. Nothing is written then.
    """
    from leadline.atlas.importing import structures_from
    from leadline.atlas.structures import derive
    from leadline.io.atlases import (
        read_labels,
        read_template,
        require_free,
        require_rows,
        require_same_grid,
        write_atlas,
    )
    from leadline.io.images import IN_COMMAND
    from leadline.io.structure_tables import read_foreign_table

    require_free(out)
    if out.resolve() in (path.resolve().parent for path in (labels, template, structures)):
        raise LeadlineError("holds the files to import", where=str(out), mend="Name a new folder for the atlas")
    progress.begin("importing the atlas", 4)
    imported = structures_from(read_foreign_table(structures), where=str(structures))
    rows = derive(imported.rows, given=imported.given)
    progress.step()
    label_volume = read_labels(labels, voxel_um=voxel_um, code=orientation, user=IN_COMMAND)
    progress.step()
    template_volume = read_template(template, voxel_um=voxel_um, code=orientation, user=IN_COMMAND)
    progress.step()
    require_same_grid(label_volume, template_volume, where=str(labels))
    counts = require_rows(label_volume, Structures(rows), where=str(labels), table=str(structures))
    write_atlas(
        out,
        name=name,
        citation=citation,
        licence=licence,
        labels=label_volume.array(),
        template=template_volume.array(),
        voxel_um=label_volume.voxel_um,
        rows=rows,
        bregma_um=bregma_um,
    )
    bregma = None if bregma_um is None else np.asarray(bregma_um, np.float64)
    progress.step()
    atlas = Atlas(name, label_volume, template_volume, Structures(rows), citation, licence, bregma)
    return _summary(atlas, counts, imported.notes)


def load_atlas(folder: Path) -> Atlas:
    """Read an atlas folder; where ``structures.csv`` has no column ``layer`` or ``tissue``, it is filled from names."""
    from leadline.atlas.structures import derive
    from leadline.io.atlases import read_atlas

    atlas = read_atlas(folder)
    given = atlas.extra["columns"].split()
    return replace(atlas, structures=Structures(derive(atlas.structures.rows, given=given)))


def check_atlas(folder: Path) -> Summary:
    """Check an atlas folder whole and say what it holds.

    Raises LeadlineError with what is wrong.
    """
    from leadline.io.atlases import label_counts

    atlas = load_atlas(folder)
    return _summary(atlas, label_counts(atlas.labels.array()), ())


def _summary(atlas: Atlas, counts: dict[int, int], notes: Sequence[str]) -> Summary:
    """Count what there is, and say what looks unusual without being wrong."""
    rows = atlas.structures.rows
    shown = [atlas.structures[k] for k in counts if k != OUTSIDE_ID]
    said = list(notes)
    if counts.get(OUTSIDE_ID, 0) == 0:
        said.append("no voxel is outside the brain (0): the brain surface cannot be found in these labels")
    if not any(row.layer for row in shown):
        said.append("no structure is a layer: cortical depth will be reported instead of layers")
    said += [
        f"no structure is of tissue '{tissue}'; write it into structures.csv where the names do not tell"
        for tissue in ("white", "ventricle")
        if not any(row.tissue == tissue for row in shown)
    ]
    if not any(row.coarse for row in rows):
        said.append("no structure is marked coarse: the coarse region is the structure itself, of a layer its area")
    return {
        "name": atlas.name,
        "shape": list(atlas.labels.shape),
        "voxel_um": [float(v) for v in atlas.voxel_um],
        "bregma_um": None if atlas.bregma_um is None else [float(v) for v in atlas.bregma_um],
        "structures": len(rows),
        "labels": len(shown),
        "layers": sum(bool(row.layer) for row in shown),
        "tissues": dict(sorted(Counter(row.tissue for row in shown).items())),
        "notes": said,
    }

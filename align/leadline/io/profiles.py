"""Depth profiles and their spectra on disk: ``profiles/NAME.parquet`` and an ``.npz`` without pickles beside it."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING
from zipfile import BadZipFile

import numpy as np

from leadline.base.atomic import whole_file
from leadline.base.errors import LeadlineError, nearest
from leadline.io.images import READ_FAULTS
from leadline.model.profile import FEATURE_BY_NAME, FEATURES, Profile
from leadline.model.spectra import SPECTRA_FIELDS, Spectra

if TYPE_CHECKING:
    from pathlib import Path

FLAGS = ("", "dead", "noisy", "outside")


def write_profile(path: Path, profile: Profile) -> None:
    """Write ``shank``, ``tip_distance_um``, a column for every feature and ``flag`` as Parquet.

    The penetration's name, the warnings and how much was read are kept in the file's own key-value notes.
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    columns = {"shank": pa.array(profile.shank), "tip_distance_um": pa.array(profile.tip_distance_um)}
    for feature in FEATURES:
        if feature.name in profile.features:
            columns[feature.name] = pa.array(profile.features[feature.name])
    columns["flag"] = pa.array(profile.flags, pa.string())
    notes = {
        "leadline.penetration": profile.penetration,
        "leadline.warnings": "\n".join(profile.warnings),
        "leadline.read_s": json.dumps(profile.read_s),
    }
    with whole_file(path) as part:
        pq.write_table(pa.table(columns, metadata=notes), part)


def read_profile(path: Path) -> Profile:
    """Read what :func:`write_profile` wrote.

    Raises LeadlineError when the file is missing, is no Parquet or holds a column that is no feature.
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    if not path.is_file():
        raise LeadlineError("there is no such profile", where=str(path), mend="Run 'leadline profile' first")
    try:
        table = pq.read_table(path)
        notes = {key.decode(): text.decode() for key, text in (table.schema.metadata or {}).items()}
    except (pa.ArrowException, OSError, ValueError) as error:
        raise LeadlineError("is no Parquet file", where=str(path), mend="Delete it and profile again") from error
    fixed = ("shank", "tip_distance_um", "flag")
    for column in fixed:
        if column not in table.column_names:
            raise LeadlineError(f"column '{column}' is missing", where=str(path), mend="Delete it and profile again")
    values = {name: table[name].to_numpy() for name in table.column_names if name not in fixed}
    for name in values:
        if name not in FEATURE_BY_NAME:
            raise LeadlineError(f"column '{name}' is no feature", where=str(path), mend=nearest(name, FEATURE_BY_NAME))
    return Profile(
        notes.get("leadline.penetration", path.stem),
        table["shank"].to_numpy(),
        table["tip_distance_um"].to_numpy(),
        values,
        tuple(table["flag"].to_pylist()),
        tuple(line for line in notes.get("leadline.warnings", "").split("\n") if line),
        tuple((float(a), float(b)) for a, b in json.loads(notes.get("leadline.read_s", "[]"))),
    )


def write_spectra(path: Path, spectra: Spectra) -> None:
    """Write the arrays of ``spectra`` as a compressed ``.npz`` without pickles."""
    words = np.array([spectra.penetration, spectra.event_kind], dtype=np.str_)
    arrays = {name: getattr(spectra, name) for name in SPECTRA_FIELDS}
    with whole_file(path) as part, part.open("wb") as handle:
        np.savez_compressed(handle, words=words, **arrays)


def read_spectra(path: Path) -> Spectra:
    """Read what :func:`write_spectra` wrote.

    Raises LeadlineError when the file is missing or holds something else.
    """
    if not path.is_file():
        raise LeadlineError("there are no such spectra", where=str(path), mend="Run 'leadline profile' first")
    try:
        with np.load(path, allow_pickle=False) as arrays:
            found = {name: arrays[name] for name in SPECTRA_FIELDS}
            penetration, kind = (str(word) for word in arrays["words"])
    except (BadZipFile, *READ_FAULTS) as error:
        raise LeadlineError("holds no spectra", where=str(path), mend="Delete it and profile again") from error
    return Spectra(penetration, **found, event_kind=kind)

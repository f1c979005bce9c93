"""``provenance.json``: with what versions and settings, and from which inputs, the tables were made."""

from __future__ import annotations

import dataclasses
import sys
from importlib.metadata import PackageNotFoundError, version
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.model.brain import Brain
    from leadline.pipeline.record import Record

CAUTION = (
    "Research use only: estimates with error, not for surgery or any clinical decision; "
    "animal work under local rules and licence."
)
LIBRARIES = ("numpy", "scipy", "pandas", "scikit-image", "SimpleITK", "tifffile", "zarr", "nibabel", "pynrrd", "numba")


def write_provenance(brain: Brain, record: Record, steps: Sequence[str]) -> None:
    """Write ``out/provenance.json``; the same run gives the same bytes."""
    from leadline import __version__
    from leadline.io.tables import write_json

    inputs: dict[str, str] = {}
    for name in steps:
        inputs |= dict(record.steps[name].inputs)
    content: dict[str, Any] = {
        "leadline": __version__,
        "brain": brain.name,
        "caution": CAUTION,
        "versions": {"python": ".".join(map(str, sys.version_info[:3]))} | _versions(),
        "settings": dataclasses.asdict(brain.settings),
        "inputs": dict(sorted(inputs.items())),
        "outputs": {k: v for n in steps for k, v in record.steps[n].outputs.items() if k.startswith("out")},
        "recordings_read_s": _read_s(brain),
        "warnings": [{"step": n, "warning": w} for n in steps for w in record.steps[n].warnings],
    }
    write_json(content, brain.out / "provenance.json")


def _read_s(brain: Brain) -> dict[str, list[dict[str, float]]]:
    """Of each recording of each penetration, how many seconds of samples were read, and of how many."""
    from leadline.io.profiles import read_profile
    from leadline.pipeline.products import ProfileFiles

    files = {p.name: ProfileFiles(brain, p.name).table for p in brain.penetrations if p.recordings}
    return {
        name: [{"read_s": read, "of_s": whole} for read, whole in read_profile(file).read_s]
        for name, file in files.items()
    }


def _versions() -> dict[str, str]:
    found = {}
    for name in LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "not installed"
    return found

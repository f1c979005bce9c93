"""What the steps hand on, as files: every product is written, then read back, so a resumed run equals a fresh one."""

from __future__ import annotations

import json
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any
from zipfile import BadZipFile

import numpy as np

from leadline.base.atomic import whole_file, write_text
from leadline.base.errors import LeadlineError
from leadline.io.images import READ_FAULTS
from leadline.model.channels import TRACK_COLUMNS
from leadline.model.posterior import DepthPosterior
from leadline.model.track import Track
from leadline.model.transform import Registration

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence
    from pathlib import Path

    from leadline.model.brain import Brain

TRANSFORMS = ("stack_to_atlas", "atlas_to_stack")
FRAME_NOTE = """\
stack_to_atlas.h5 and atlas_to_stack.h5 are ITK transforms on points, in micrometres.

stack_to_atlas.h5 takes (s0, s1, s2), micrometres along the stored axes of the stack from the centre of its first
voxel, to (ap, dv, ml), micrometres in the atlas: ap grows posterior, dv inferior, ml right, from the centre of the
first voxel of the atlas volume laid out as PIR. atlas_to_stack.h5 goes the other way.

    import SimpleITK as sitk
    sitk.ReadTransform("stack_to_atlas.h5").TransformPoint((s0_um, s1_um, s2_um))

Estimates with error, for research only: see error_um in qc.json.
"""


@contextmanager
def _undamaged(path: Path, stage: str) -> Iterator[None]:
    """Say that a file of ours is damaged, and which stage makes it anew, where reading it fails."""
    try:
        yield
    except LeadlineError:
        raise
    except (BadZipFile, AttributeError, *READ_FAULTS) as error:
        raise LeadlineError(
            f"is damaged ({type(error).__name__})", where=str(path), mend=f"Run `leadline {stage}` again"
        ) from error


@dataclass(frozen=True)
class RegistrationFiles:
    """Files of ``out/registration``."""

    brain: Brain

    @property
    def folder(self) -> Path:
        """The folder."""
        return self.brain.out / "registration"

    @property
    def stack_to_atlas(self) -> Path:
        """Transform of points, stack to atlas."""
        return self.folder / "stack_to_atlas.h5"

    @property
    def atlas_to_stack(self) -> Path:
        """Transform of points, atlas to stack."""
        return self.folder / "atlas_to_stack.h5"

    @property
    def quality(self) -> Path:
        """Numbers."""
        return self.folder / "qc.json"

    @property
    def picture(self) -> Path:
        """Atlas outlines over the sample."""
        return self.folder / "qc.png"

    @property
    def arrays(self) -> Path:
        """Both transforms, as they are read back."""
        return self.brain.cache / "registration.npz"

    @property
    def all(self) -> tuple[Path, ...]:
        """Every file of the stage."""
        readme = self.folder / "README"
        return self.stack_to_atlas, self.atlas_to_stack, self.quality, self.picture, readme, self.arrays

    def write(self, registration: Registration) -> None:
        """Write transforms, numbers and the note on frames."""
        from leadline.io.transforms import write_transforms
        from leadline.registration._sitk import write_point_transform

        both = {name: getattr(registration, name) for name in TRANSFORMS}
        write_transforms(self.arrays, both)
        write_point_transform(self.stack_to_atlas, registration.stack_to_atlas)
        write_point_transform(self.atlas_to_stack, registration.atlas_to_stack)
        content = {
            "error_um": round(float(registration.error_um), 2),
            **{name: _short(value) for name, value in registration.quality.items()},
            "warnings": list(registration.warnings),
        }
        write_text(self.quality, json.dumps(content, indent=2, ensure_ascii=False) + "\n")
        write_text(self.folder / "README", FRAME_NOTE)

    def read(self) -> Registration:
        """The registration as written; raises LeadlineError when a file is missing or damaged."""
        from leadline.io.transforms import read_transforms

        stack_to_atlas, atlas_to_stack = read_transforms(self.arrays, TRANSFORMS)
        with _undamaged(self.quality, "register"):
            quality = json.loads(self.quality.read_text(encoding="utf-8"))
            error_um, warnings = float(quality.pop("error_um")), tuple(quality.pop("warnings"))
        return Registration(stack_to_atlas, atlas_to_stack, error_um, quality, warnings)


def _short(value: float | str | list[float]) -> float | str | list[float]:
    """Numbers to the digits that mean something."""
    return round(float(value), 4) if isinstance(value, float | int) else value


@dataclass(frozen=True)
class ProfileFiles:
    """Files of one penetration's profile."""

    brain: Brain
    name: str

    @property
    def table(self) -> Path:
        """The profile itself."""
        return self.brain.out / "profiles" / f"{self.name}.parquet"

    @property
    def picture(self) -> Path:
        """Its picture."""
        return self.brain.out / "profiles" / f"{self.name}.png"

    @property
    def spectra(self) -> Path:
        """Power by frequency and row."""
        return self.brain.cache / "spectra" / f"{self.name}.npz"

    @property
    def all(self) -> tuple[Path, ...]:
        """Every file of the step."""
        return self.table, self.picture, self.spectra


def write_tracks(brain: Brain, tracks: Sequence[Track], missing: Sequence[str]) -> None:
    """Write ``tracks.csv``, and beside the cache what the table has no column for."""
    import pandas as pd

    from leadline.io.tables import write_table

    frames = [
        pd.DataFrame(
            {
                "penetration": t.penetration,
                "shank": t.shank,
                "order": np.arange(len(t.stack_um)),
                **{f"s{k}_um": t.stack_um[:, k].round(2) for k in range(3)},
                **{name: t.atlas_um[:, k].round(2) for k, name in enumerate(("ap_um", "dv_um", "ml_um"))},
                "track_depth_um": t.track_depth_um.round(2),
                "radius_um": t.radius_um.round(2),
            }
        )
        for t in tracks
    ]
    table = pd.concat(frames) if frames else pd.DataFrame(columns=list(TRACK_COLUMNS))
    ends = [
        {
            "penetration": t.penetration,
            "shank": t.shank,
            "entry_sd_um": round(t.entry_sd_um, 2),
            "end_sd_um": round(t.end_sd_um, 2),
            "source": t.source,
        }
        for t in tracks
    ]
    write_table(table[list(TRACK_COLUMNS)], brain.out / "tracks.csv")
    text = json.dumps({"tracks": ends, "missing": list(missing)}, indent=1, ensure_ascii=False)
    write_text(brain.cache / "tracks.json", text + "\n")


def read_tracks(brain: Brain) -> tuple[tuple[Track, ...], tuple[str, ...]]:
    """Tracks as written, and a message for every penetration that lacks one."""
    import pandas as pd

    with _undamaged(brain.out / "tracks.csv", "trace"):
        table = pd.read_csv(brain.out / "tracks.csv", dtype={"penetration": str})
    with _undamaged(brain.cache / "tracks.json", "trace"):
        content = json.loads((brain.cache / "tracks.json").read_text(encoding="utf-8"))
        return tuple(_track(table, ends) for ends in content["tracks"]), tuple(content["missing"])


def _track(table: Any, ends: dict[str, Any]) -> Track:
    rows = table[(table["penetration"] == ends["penetration"]) & (table["shank"] == ends["shank"])]
    return Track(
        ends["penetration"],
        int(ends["shank"]),
        rows[["s0_um", "s1_um", "s2_um"]].to_numpy(float),
        rows[["ap_um", "dv_um", "ml_um"]].to_numpy(float),
        rows["radius_um"].to_numpy(float),
        float(ends["entry_sd_um"]),
        float(ends["end_sd_um"]),
        ends["source"],
        rows["track_depth_um"].to_numpy(float),
    )


def write_posteriors(brain: Brain, posteriors: Sequence[DepthPosterior]) -> None:
    """Keep the draws of every shank."""
    arrays: dict[str, Any] = {}
    heads = []
    for i, p in enumerate(posteriors):
        arrays[f"tip_{i}"] = p.tip_distance_um
        arrays[f"depth_{i}"] = p.depth_um.astype(np.float32)
        if p.label_id is not None:
            arrays[f"label_{i}"] = p.label_id.astype(np.uint32)
        heads.append(
            {
                "penetration": p.penetration,
                "shank": p.shank,
                "informed": p.informed,
                "diagnostics": dict(p.diagnostics),
                "warnings": list(p.warnings),
            }
        )
    arrays["heads"] = np.array(json.dumps(heads))
    with whole_file(brain.cache / "posterior.npz") as part:
        np.savez(part, **arrays)


def read_posteriors(brain: Brain) -> tuple[DepthPosterior, ...]:
    """Draws as kept."""
    path = brain.cache / "posterior.npz"
    with _undamaged(path, "anchor"), np.load(path, allow_pickle=False) as arrays:
        heads = json.loads(str(arrays["heads"]))
        return tuple(_posterior(arrays, i, head) for i, head in enumerate(heads))


def _posterior(arrays: Mapping[str, Any], i: int, head: dict[str, Any]) -> DepthPosterior:
    label = arrays[f"label_{i}"].astype(np.int64) if f"label_{i}" in arrays else None
    return DepthPosterior(
        head["penetration"],
        head["shank"],
        arrays[f"tip_{i}"],
        arrays[f"depth_{i}"].astype(float),
        head["informed"],
        head["diagnostics"],
        tuple(head["warnings"]),
        label,
    )

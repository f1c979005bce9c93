"""The Python door: a brain, its stages, and its results as frozen values and pandas frames."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from leadline.base.progress import SILENT, Progress
from leadline.pipeline import products
from leadline.pipeline.bench import Bench

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd

    from leadline.model.anchor import Anchor, Suggestion
    from leadline.model.atlas import Atlas
    from leadline.model.brain import Brain
    from leadline.model.posterior import DepthPosterior
    from leadline.model.profile import Profile
    from leadline.model.track import Track
    from leadline.model.transform import Registration


@dataclass(frozen=True, slots=True, eq=False)
class Results:
    """What a run found. ``channels``, ``posterior`` : the tables of ``out/``; the rest are frozen values.

    ``warnings`` : sentences, with the step that they come from. ``profiles`` : by penetration.
    """

    channels: pd.DataFrame
    posterior: pd.DataFrame
    tracks: tuple[Track, ...]
    depth_maps: tuple[DepthPosterior, ...]
    registration: Registration
    profiles: Mapping[str, Profile]
    anchors: tuple[Anchor, ...]
    suggestions: tuple[Suggestion, ...]
    warnings: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True, eq=False)
class OpenBrain:
    """A brain as its file describes it. Methods raise LeadlineError when an input is wrong."""

    brain: Brain

    @classmethod
    def at(cls, path: str | Path) -> OpenBrain:
        """Read a ``brain.toml`` or the one in a folder."""
        from leadline.io.brainfile import read_brain

        return cls(read_brain(Path(path)))

    def check(self) -> tuple[str, ...]:
        """Look at every input and return what is worth knowing; raises LeadlineError with all that is wrong."""
        from leadline.base.errors import Faults
        from leadline.pipeline.check import check

        found = check(self.brain)
        if found.faults:
            raise found.faults[0] if len(found.faults) == 1 else Faults(found.faults)
        return found.notes

    def run(self, *, physiology: bool = True, progress: Progress = SILENT) -> Results:
        """Run every stage that is not up to date and return the results.

        ``physiology`` : False leaves out what the recordings say of depth, as ``--no-physiology`` does.
        """
        from leadline.pipeline.run import run, without_physiology

        brain = self.brain if physiology else without_physiology(self.brain)
        summary = run(brain, progress=progress)
        return self._results(summary.warnings)

    def units(self, progress: Progress = SILENT) -> pd.DataFrame:
        """Every unit with its region, layer and the user's own columns; also writes ``out/units.*``."""
        from leadline.pipeline.units import write_units

        return write_units(self.brain, progress)

    @property
    def atlas(self) -> Atlas:
        """The brain's atlas, read."""
        return Bench(self.brain).atlas

    def _results(self, warnings: tuple[tuple[str, str], ...]) -> Results:
        import pandas as pd

        from leadline.io.profiles import read_profile
        from leadline.io.tables import read_anchors, read_suggestions

        brain = self.brain
        files = {p.name: products.ProfileFiles(brain, p.name).table for p in brain.penetrations if p.recordings}
        return Results(
            channels=pd.read_parquet(brain.out / "channels.parquet"),
            posterior=pd.read_parquet(brain.out / "posterior.parquet"),
            tracks=products.read_tracks(brain)[0],
            depth_maps=products.read_posteriors(brain),
            registration=products.RegistrationFiles(brain).read(),
            profiles={name: read_profile(file) for name, file in files.items()},
            anchors=read_anchors(brain.out / "anchors.csv"),
            suggestions=read_suggestions(brain.out / "suggestions.csv"),
            warnings=warnings,
        )

"""All that a report shows of one brain, read once from its results."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.pipeline import products

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd

    from leadline.model.anchor import Anchor, Suggestion
    from leadline.model.brain import Brain
    from leadline.model.posterior import DepthPosterior
    from leadline.model.profile import Profile
    from leadline.model.spectra import Spectra
    from leadline.model.track import Track
    from leadline.model.transform import Registration
    from leadline.pipeline.bench import Bench


@dataclass(frozen=True, slots=True, eq=False)
class Findings:
    """Results of a located brain. ``channels``, ``odds`` : the tables; ``quality`` : ``qc.json``."""

    bench: Bench
    channels: pd.DataFrame
    odds: pd.DataFrame
    tracks: tuple[Track, ...]
    missing: tuple[str, ...]
    posteriors: tuple[DepthPosterior, ...]
    anchors: tuple[Anchor, ...]
    suggestions: tuple[Suggestion, ...]
    registration: Registration
    provenance: Mapping[str, Any]

    @property
    def brain(self) -> Brain:
        """The brain."""
        return self.bench.brain

    @property
    def warnings(self) -> list[str]:
        """Sentences for the user, each once."""
        told = (_in_words(str(w["step"]), str(w["warning"])) for w in self.provenance["warnings"])
        return list(dict.fromkeys(told))

    def shanks(self) -> list[tuple[str, int]]:
        """(penetration, shank) of every shank with channels, in the order of the table."""
        pairs = self.channels[["penetration", "shank"]].drop_duplicates()
        return [(str(p), int(s)) for p, s in pairs.itertuples(index=False)]

    def shank(self, penetration: str, shank: int) -> Shank:
        """What is known of one shank."""
        mine = (self.channels["penetration"] == penetration) & (self.channels["shank"] == shank)
        rows = self.channels[mine].sort_values("tip_distance_um", kind="stable").reset_index(drop=True)
        odds = self.odds[(self.odds["penetration"] == penetration) & self.odds["channel"].isin(rows["channel"])]
        track = next((t for t in self.tracks if (t.penetration, t.shank) == (penetration, shank)), None)
        profile, spectra = _profile(self.brain, penetration)
        return Shank(
            penetration=penetration,
            shank=shank,
            of_several=len([p for p, _ in self.shanks() if p == penetration]) > 1,
            channels=rows,
            odds=odds,
            track=track,
            profile=None if profile is None else profile.of_shank(shank),
            spectra=spectra,
            anchors=tuple(a for a in self.anchors if (a.penetration, a.shank) == (penetration, shank)),
            suggestions=tuple(
                s for s in self.suggestions if (s.anchor.penetration, s.anchor.shank) == (penetration, shank)
            ),
        )


@dataclass(frozen=True, slots=True, eq=False)
class Shank:
    """One shank's results; ``channels`` from the tip upward, ``track`` None where none was found."""

    penetration: str
    shank: int
    of_several: bool
    channels: pd.DataFrame
    odds: pd.DataFrame
    track: Track | None
    profile: Profile | None
    spectra: Spectra | None
    anchors: tuple[Anchor, ...]
    suggestions: tuple[Suggestion, ...]

    @property
    def title(self) -> str:
        """Its name for people."""
        return f"{self.penetration}, shank {self.shank}" if self.of_several else self.penetration

    @property
    def located(self) -> bool:
        """Whether a track places its channels."""
        return self.track is not None and bool(self.channels["track_depth_um"].notna().any())


def gather(bench: Bench) -> Findings:
    """Read the results of a located brain."""
    from leadline.io.tables import read_anchors, read_suggestions

    brain = bench.brain
    tracks, missing = products.read_tracks(brain)
    return Findings(
        bench=bench,
        channels=_table(brain.out / "channels.parquet"),
        odds=_table(brain.out / "posterior.parquet"),
        tracks=tracks,
        missing=missing,
        posteriors=products.read_posteriors(brain),
        anchors=read_anchors(brain.out / "anchors.csv"),
        suggestions=read_suggestions(brain.out / "suggestions.csv"),
        registration=products.RegistrationFiles(brain).read(),
        provenance=json.loads((brain.out / "provenance.json").read_text(encoding="utf-8")),
    )


def _in_words(step: str, warning: str) -> str:
    """A warning with the penetration that it is about, where it does not say so itself."""
    stage, _, name = step.partition(" ")
    return f"penetration {name}, {stage}: {warning}" if name and name not in warning.split() else warning


def _table(path: Any) -> pd.DataFrame:
    import pandas as pd

    table = pd.read_parquet(path)
    for column in ("track_depth_um", "track_depth_sd_um", "ap_um", "dv_um", "ml_um", "p_region", "p_coarse"):
        if column in table.columns:  # unlocated rows make a column of objects
            table[column] = pd.to_numeric(table[column]).astype(np.float64)
    return table


def _profile(brain: Brain, penetration: str) -> tuple[Profile | None, Spectra | None]:
    from leadline.io.profiles import read_profile, read_spectra

    files = products.ProfileFiles(brain, penetration)
    if not files.table.is_file():
        return None, None
    return read_profile(files.table), read_spectra(files.spectra) if files.spectra.is_file() else None

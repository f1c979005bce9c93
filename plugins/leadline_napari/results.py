"""What a brain's stages have written so far, read back; what is not there yet is None or empty."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from leadline.io.tables import read_suggestions
from leadline.pipeline import products

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd

    from leadline.model.anchor import Suggestion
    from leadline.model.brain import Brain
    from leadline.model.posterior import DepthPosterior
    from leadline.model.profile import Profile
    from leadline.model.spectra import Spectra
    from leadline.model.track import Track
    from leadline.model.transform import Registration

    Key = tuple[str, int]


@dataclass(frozen=True, slots=True, eq=False)
class Results:
    """Products by stage. ``tracks``, ``posteriors`` by (penetration, shank); ``profiles``, ``spectra`` by name."""

    registration: Registration | None = None
    tracks: Mapping[Key, Track] = field(default_factory=dict)
    missing: tuple[str, ...] = ()
    profiles: Mapping[str, Profile] = field(default_factory=dict)
    spectra: Mapping[str, Spectra] = field(default_factory=dict)
    suggestions: tuple[Suggestion, ...] = ()
    posteriors: Mapping[Key, DepthPosterior] = field(default_factory=dict)
    channels: pd.DataFrame | None = None


def read_results(brain: Brain) -> Results:
    """Read everything there is.

    Raises LeadlineError when a file is there but damaged.
    """
    registration = products.RegistrationFiles(brain)
    tracks: tuple[Track, ...] = ()
    missing: tuple[str, ...] = ()
    if (brain.out / "tracks.csv").is_file() and (brain.cache / "tracks.json").is_file():
        tracks, missing = products.read_tracks(brain)
    posteriors = products.read_posteriors(brain) if (brain.cache / "posterior.npz").is_file() else ()
    profiles, spectra = _profiles(brain)
    return Results(
        registration.read() if registration.quality.is_file() else None,
        {(t.penetration, t.shank): t for t in tracks},
        missing,
        profiles,
        spectra,
        read_suggestions(brain.out / "suggestions.csv"),
        {(p.penetration, p.shank): p for p in posteriors},
        _channels(brain),
    )


def _profiles(brain: Brain) -> tuple[dict[str, Profile], dict[str, Spectra]]:
    from leadline.io.profiles import read_profile, read_spectra

    profiles, spectra = {}, {}
    for penetration in brain.penetrations:
        files = products.ProfileFiles(brain, penetration.name)
        if files.table.is_file():
            profiles[penetration.name] = read_profile(files.table)
        if files.spectra.is_file():
            spectra[penetration.name] = read_spectra(files.spectra)
    return profiles, spectra


def _channels(brain: Brain) -> pd.DataFrame | None:
    import pandas as pd

    file = brain.out / "channels.parquet"
    return pd.read_parquet(file) if file.is_file() else None

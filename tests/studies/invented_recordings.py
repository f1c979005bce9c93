"""Invented recordings of whole penetrations, read as a run reads them, with the true tracks a little misplaced."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from leadline.anchoring.evidence import ShankEvidence
from leadline.base.arrays import FloatArray
from leadline.demo import recipe as kinds
from leadline.demo.anatomy import make_atlas
from leadline.demo.recipe import Recipe
from leadline.demo.recording import write_recording
from leadline.demo.tracks import TruePenetration
from leadline.demo.write import invent
from leadline.io.sources import open_recording
from leadline.model.brain import RecordingSource
from leadline.model.probe import Probe
from leadline.model.profile import Profile
from leadline.model.recording import Recording
from leadline.model.settings import ProfileSettings
from leadline.model.track import Track
from leadline.physiology.reading import read
from leadline.physiology.rows import rows_of
from leadline.pipeline.evidence import labels_along

ATLAS = make_atlas(Recipe(1))
SECONDS, ERROR_UM = 16.0, 25.0
SETTINGS = ProfileSettings()


@dataclass(frozen=True)
class Recorded:
    """One penetration. ``silent`` : its recording says nothing of the structures."""

    name: str
    probe: Probe
    recording: Recording
    evidence: list[ShankEvidence]
    silent: bool

    def order(self, probe: Probe) -> list[str]:
        """What a run says of a site map, from the fields alone."""
        fields = replace(self.recording, spikes=None, events=None)
        told = read(fields, probe, rows_of(probe), SETTINGS).warnings
        return [w for w in told if "probe file" in w or "site map" in w]

    def wrong_maps(self, rng: np.random.Generator) -> dict[str, Probe]:
        """Site maps that somebody might give for this probe, by kind."""
        p, trace = self.probe, self.probe.channel
        rank = np.argsort(np.argsort(trace))
        maps = {"scrambled": self._sites(rng.permutation(len(trace)))}
        if self.name == "A":
            maps["halves exchanged"] = self._sites((np.arange(len(trace)) + 192) % len(trace))
            maps["other probe"] = _placed(p, 20.0 * (rank % 96), 250.0 * (rank // 96), rank // 96)
            maps["other banks"] = _placed(
                p, 20.0 * np.array([*range(80), *range(104, 164), *range(186, 238)])[rank // 2]
            )
        elif self.name == "B":
            maps["other probe"] = _placed(p, 20.0 * (rank // 2), 16.0 * (rank % 4), 0 * rank)
            maps["wiring ignored"] = self._sites(rank)
        else:
            maps["other banks"] = _placed(p, 20.0 * (rank // 2))
        return maps

    def _sites(self, of: np.ndarray) -> Probe:
        """Contact k said to be where contact ``of[k]`` is."""
        p = self.probe
        return _placed(p, p.y_um[of], p.x_um[of], p.shank[of])


def _placed(probe: Probe, y_um: FloatArray, x_um: FloatArray | None = None, shank=None) -> Probe:
    return replace(
        probe,
        y_um=y_um,
        x_um=probe.x_um if x_um is None else x_um,
        shank=probe.shank if shank is None else shank,
    )


def record(folder: Path, seed: int, *, rough: bool) -> list[Recorded]:
    """Record and read the three penetrations of a seed."""
    recipe = Recipe(seed, seconds=SECONDS)
    recipe = kinds.rough(recipe) if rough else recipe
    return [_recorded(folder, recipe, pen) for pen in invent(recipe).penetrations]


def _recorded(folder: Path, recipe: Recipe, pen: TruePenetration) -> Recorded:
    table = write_recording(folder, recipe, pen)
    files = {k: folder / table.pop(k) for k in ("lfp", "spikes", "events", "exclude") if k in table}
    skip = tuple(table.pop("skip_channels", ()))
    probe = pen.design.probe.recorded
    recording = open_recording(RecordingSource(**table, **files, skip_channels=skip), probe, pen.name, pen.name)
    rows = rows_of(probe)
    reading = read(recording, probe, rows, SETTINGS)
    profile = Profile(pen.name, rows.shank, rows.tip_distance_um, reading.features, tuple(reading.flags))
    evidence = [_evidence(pen, shank, probe, profile) for shank in pen.shanks]
    return Recorded(pen.name, probe, recording, evidence, recipe.silent == pen.name)


def _evidence(pen: TruePenetration, shank, probe: Probe, profile: Profile) -> ShankEvidence:
    """The true track down to the dye's end, moved by a registration error; nobody wrote down the insertion."""
    depth = np.arange(0.0, shank.dye_end_um, 20.0)
    error = np.random.default_rng([shank.number, round(shank.dye_end_um)]).normal(0, ERROR_UM, 3)
    at = shank.at(np.append(depth, shank.dye_end_um)) + error
    track = Track(pen.name, shank.number, at, at, np.full(len(at), 20.0), 25.0, 25.0)
    along, label, lateral = labels_along(track, ATLAS, ERROR_UM)
    tip = np.unique(probe.tip_distance_um[probe.shank == shank.number])
    return ShankEvidence(
        pen.name, shank.number, tip, profile.of_shank(shank.number), along, label, track.length_um,
        entry_sd_um=25.0, end_sd_um=25.0, registration_error_um=ERROR_UM, lateral_label_id=lateral,
    )  # fmt: skip

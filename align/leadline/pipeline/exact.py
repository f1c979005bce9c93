"""The exact answer for one penetration in memory: what ``anchor`` and ``locate`` would write, without writing it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.progress import SILENT, Progress
from leadline.locating.preview import LabelTable
from leadline.pipeline.work import labels_along

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.evidence import ShankEvidence
    from leadline.locating.assign import Located
    from leadline.model.anchor import Anchor
    from leadline.model.posterior import DepthPosterior
    from leadline.model.probe import Probe
    from leadline.model.track import Track
    from leadline.pipeline.bench import Bench


@dataclass(frozen=True, slots=True, eq=False)
class ShankGround:
    """What the answer for one shank stands on: its track, its contacts, the evidence and the labels along the track."""

    track: Track
    contacts: Probe
    evidence: ShankEvidence
    table: LabelTable
    error_um: float


@dataclass(frozen=True, slots=True, eq=False)
class ShankAnswer:
    """The posterior of one shank and its contacts, located."""

    posterior: DepthPosterior
    located: Located


def ground(bench: Bench, tracks: Sequence[Track]) -> tuple[ShankGround, ...]:
    """Open what is known of shanks of one penetration whose ``tracks`` are given; the brain must be registered.

    Raises LeadlineError when a profile that should be there is missing or damaged.
    """
    from leadline.anchoring.evidence import ShankEvidence
    from leadline.io.profiles import read_profile
    from leadline.pipeline.products import ProfileFiles, RegistrationFiles

    error_um = RegistrationFiles(bench.brain).read().error_um
    by_name = {p.name: p for p in bench.brain.penetrations}
    probes = {name: bench.probe(by_name[name]) for name in {t.penetration for t in tracks}}
    found = []
    for track in tracks:
        penetration, probe = by_name[track.penetration], probes[track.penetration]
        contacts = probe.take(np.flatnonzero(probe.shank == track.shank))
        if not contacts.contact_id:
            continue
        file = ProfileFiles(bench.brain, penetration.name).table
        profile = read_profile(file).of_shank(track.shank) if penetration.recordings and file.is_file() else None
        depth, label, lateral = labels_along(track, bench.atlas, error_um)
        evidence = ShankEvidence(
            penetration=track.penetration,
            shank=track.shank,
            tip_distance_um=np.unique(contacts.tip_distance_um),
            profile=profile,
            depth_um=depth,
            label_id=label,
            lateral_label_id=lateral,
            end_depth_um=track.length_um,
            entry_sd_um=track.entry_sd_um,
            end_sd_um=track.end_sd_um,
            registration_error_um=error_um,
            inserted_um=penetration.inserted_um,
        )
        found.append(ShankGround(track, contacts, evidence, LabelTable(depth, label, lateral), error_um))
    return tuple(found)


def answer(
    bench: Bench, shanks: Sequence[ShankGround], anchors: Sequence[Anchor], progress: Progress = SILENT
) -> tuple[ShankAnswer, ...]:
    """Posterior and regions of the shanks of one penetration under ``anchors``, in the order given.

    Raises LeadlineError when two anchors cross.
    """
    from leadline.anchoring.manual import manual_map, recentred
    from leadline.anchoring.posterior import infer

    settings = bench.brain.settings.anchor
    evidence = [replace(s.evidence, anchors=_of(anchors, s)) for s in shanks]
    posteriors = infer(
        evidence,
        bench.atlas.structures,
        bench.knowledge,
        draws=settings.draws,
        seed=settings.seed,
        physiology=settings.physiology,
        progress=progress,
    )
    answers = []
    for shank, e, posterior in zip(shanks, evidence, posteriors, strict=True):
        if not settings.physiology or e.profile is None:
            posterior = recentred(posterior, manual_map(e.anchors, e.end_depth_um))
        answers.append(ShankAnswer(posterior, located(bench, shank, posterior, e.anchors)))
    return tuple(answers)


def located(bench: Bench, shank: ShankGround, posterior: DepthPosterior, anchors: Sequence[Anchor]) -> Located:
    """Contacts of one shank under a posterior."""
    from leadline.locating.assign import locate

    return locate(
        shank.contacts.tip_distance_um,
        shank.track,
        posterior,
        bench.atlas,
        _of(anchors, shank),
        registration_error_um=shank.error_um,
        seed=bench.brain.settings.locate.seed,
    )


def _of(anchors: Sequence[Anchor], shank: ShankGround) -> tuple[Anchor, ...]:
    return tuple(a for a in anchors if (a.penetration, a.shank) == (shank.track.penetration, shank.track.shank))

"""The exact answer for one penetration in memory: what ``anchor`` and ``locate`` would write, without writing it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.progress import SILENT, Progress
from leadline.locating.preview import LabelTable
from leadline.pipeline.evidence import drawn, settled, shank_evidence
from leadline.pipeline.products import RegistrationFiles

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
    by_name = {p.name: p for p in bench.brain.penetrations}
    track_of = {(t.penetration, t.shank): t for t in tracks}
    error_um = RegistrationFiles(bench.brain).read().error_um
    found = []
    for evidence in shank_evidence(bench, tracks, ()):
        probe = bench.probe(by_name[evidence.penetration])
        contacts = probe.take(np.flatnonzero(probe.shank == evidence.shank))
        table = LabelTable(evidence.depth_um, evidence.label_id, evidence.lateral_label_id)
        track = track_of[evidence.penetration, evidence.shank]
        found.append(ShankGround(track, contacts, evidence, table, error_um))
    return tuple(found)


def posteriors(
    bench: Bench, shanks: Sequence[ShankGround], anchors: Sequence[Anchor], progress: Progress = SILENT
) -> tuple[DepthPosterior, ...]:
    """Posteriors of the shanks of one penetration under ``anchors``, in the order given.

    Raises LeadlineError when two anchors cross, Cancelled when ``progress`` says so.
    """
    evidence = [replace(s.evidence, anchors=_of(anchors, s)) for s in shanks]
    return settled(bench, drawn(bench, evidence, progress), evidence)


def answer(
    bench: Bench, shanks: Sequence[ShankGround], anchors: Sequence[Anchor], progress: Progress = SILENT
) -> tuple[ShankAnswer, ...]:
    """Posterior and regions of the shanks of one penetration under ``anchors``, in the order given.

    Raises LeadlineError when two anchors cross.
    """
    found = posteriors(bench, shanks, anchors, progress)
    return tuple(ShankAnswer(p, located(bench, s, p, anchors)) for s, p in zip(shanks, found, strict=True))


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

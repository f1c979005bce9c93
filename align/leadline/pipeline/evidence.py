"""What is known of shanks' depth maps, gathered for the inference, and the draws that come of it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from leadline.base.progress import Progress
from leadline.pipeline.products import ProfileFiles, RegistrationFiles

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.evidence import ShankEvidence
    from leadline.base.arrays import FloatArray, IntArray
    from leadline.model.anchor import Anchor
    from leadline.model.atlas import Atlas
    from leadline.model.posterior import DepthPosterior
    from leadline.model.track import Track
    from leadline.pipeline.bench import Bench

LABEL_STEP_UM = 5.0
BEYOND_UM = 1500.0
LATERAL_COPIES = 16


def shank_evidence(bench: Bench, tracks: Sequence[Track], anchors: Sequence[Anchor]) -> tuple[ShankEvidence, ...]:
    """All that is known of the depth map of each shank that has a track and a recorded contact.

    The brain must be registered. Raises LeadlineError when a profile is damaged.
    """
    from leadline.anchoring.evidence import ShankEvidence
    from leadline.io.profiles import read_profile

    error_um = RegistrationFiles(bench.brain).read().error_um
    by_name = {p.name: p for p in bench.brain.penetrations}
    probes = {name: bench.probe(by_name[name]) for name in {t.penetration for t in tracks}}
    found = []
    for track in tracks:
        penetration, probe = by_name[track.penetration], probes[track.penetration]
        contacts = probe.tip_distance_um[probe.shank == track.shank]
        if not contacts.size:
            continue
        file = ProfileFiles(bench.brain, penetration.name).table
        depth, label, lateral = labels_along(track, bench.atlas, error_um)
        found.append(
            ShankEvidence(
                penetration=track.penetration,
                shank=track.shank,
                tip_distance_um=np.unique(contacts),
                profile=read_profile(file).of_shank(track.shank) if penetration.recordings and file.is_file() else None,
                depth_um=depth,
                label_id=label,
                lateral_label_id=lateral,
                end_depth_um=track.length_um,
                entry_sd_um=track.entry_sd_um,
                end_sd_um=track.end_sd_um,
                registration_error_um=error_um,
                inserted_um=penetration.inserted_um,
                anchors=tuple(a for a in anchors if (a.penetration, a.shank) == (track.penetration, track.shank)),
            )
        )
    return tuple(found)


def drawn(
    bench: Bench, evidence: Sequence[ShankEvidence], progress: Progress | None = None
) -> tuple[DepthPosterior, ...]:
    """Draws of every shank's depth map, by the settings of the brain.

    Raises LeadlineError when two anchors of a shank cross.
    """
    from leadline.anchoring.posterior import infer

    settings = bench.brain.settings.anchor
    return infer(
        evidence,
        bench.atlas.structures,
        bench.knowledge,
        draws=settings.draws,
        seed=settings.seed,
        physiology=settings.physiology,
        progress=progress or bench.progress,
    )


def settled(
    bench: Bench, posteriors: Sequence[DepthPosterior], evidence: Sequence[ShankEvidence]
) -> tuple[DepthPosterior, ...]:
    """The same draws; where no recording was asked they are moved onto the depth map that the anchors draw by hand."""
    from leadline.anchoring.manual import manual_map, recentred

    heard = bench.brain.settings.anchor.physiology
    return tuple(
        p if heard and e.profile is not None else recentred(p, manual_map(e.anchors, e.end_depth_um))
        for p, e in zip(posteriors, evidence, strict=True)
    )


def labels_along(track: Track, atlas: Atlas, error_um: float) -> tuple[FloatArray, IntArray, IntArray]:
    """Structure ids every 5 um from 1500 um above the entry to 1500 um beyond the end: along the track ``(M,)``, and
    along copies of it moved sideways by the registration error ``(K, M)``."""
    depth = np.arange(-BEYOND_UM, track.length_um + BEYOND_UM, LABEL_STEP_UM)
    points = track.atlas_at(depth)
    tangent = points[-1] - points[0]
    tangent /= np.linalg.norm(tangent)
    side = np.cross(tangent, np.eye(3)[np.argmin(np.abs(tangent))])
    side /= np.linalg.norm(side)
    other = np.cross(tangent, side)
    # Sixteen points of a sunflower whose radii follow the Rayleigh law: a fixed sample of a 2-D normal.
    k = np.arange(LATERAL_COPIES) + 0.5
    radius = error_um * np.sqrt(-2.0 * np.log(1.0 - k / LATERAL_COPIES))
    angle = k * np.pi * (3.0 - np.sqrt(5.0))
    shift = radius[:, None] * (np.cos(angle)[:, None] * side + np.sin(angle)[:, None] * other)
    return depth, atlas.label_at(points), atlas.label_at(points[None] + shift[:, None])

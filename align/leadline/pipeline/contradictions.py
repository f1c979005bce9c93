"""What contradicts what: the one place that asks every check of a brain whose answer might be wrong without an error.

DEVELOPERS.md lists the ways ("Wrong in silence"); the checks themselves stand in the rooms that know the matter.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence
    from pathlib import Path

    from leadline.anchoring.evidence import ShankEvidence
    from leadline.base.arrays import FloatArray
    from leadline.model.anchor import Anchor
    from leadline.model.atlas import Atlas
    from leadline.model.brain import Brain, Penetration
    from leadline.model.probe import Probe
    from leadline.model.track import Track
    from leadline.model.transform import Registration
    from leadline.pipeline.bench import Bench
    from leadline.tracing.assign import TracedPath, Wanted

# common practice, no source: no probe is that short or long, no insertion that shallow, in um
PROBE_UM, INSERTED_UM = (60.0, 30000.0), (100.0, 30000.0)
PLAN_FROM_SURFACE_UM = 1500.0
BEYOND_PROBE_UM = 1000.0
OUTSIDE_SHARE = 0.4
COARSE_UM = 200.0


def of_registration(registration: Registration) -> tuple[str, ...]:
    """Size and likeness of the brain."""
    from leadline.registration.plausible import doubts

    return doubts(registration)


def of_insertions(bench: Bench) -> tuple[str, ...]:
    """Probes, plans and insertion depths as written down, before anything is computed."""
    out = [s for p in bench.brain.penetrations for s in _of_insertion(p, bench.probe(p))]
    plans = {p.name: p.entry_near_um for p in bench.brain.penetrations if p.entry_near_um is not None}
    if plans:
        far_um = _from_surface(bench.atlas, np.array(list(plans.values()), float))
        out += [
            f"penetration {name}: entry_near_um {list(plan)} lies {far:.0f} um from the surface of the atlas's brain; "
            "it is ap, dv, ml in atlas um (not millimetres, not from bregma)"
            for (name, plan), far in zip(plans.items(), far_um, strict=True)
            if far > PLAN_FROM_SURFACE_UM
        ]
    return tuple(out)


def of_recordings(brain: Brain, penetration: Penetration) -> tuple[str, ...]:
    """Files that another penetration is also given, under whatever name."""
    mine = _files(penetration)
    others = [p for p in brain.penetrations if p.name != penetration.name]
    return tuple(
        f"penetration {penetration.name}: {file.name} holds the same as {twin.name} of penetration {other.name}; whose "
        "is it?"
        for file in mine
        for other in others
        for twin in _files(other)
        if _alike(file, twin)
    )


def _files(penetration: Penetration) -> list[Path]:
    """Recordings and points; one NWB file may hold several penetrations."""
    given = [q for r in penetration.recordings for q in (r.lfp, r.spikes)] + [penetration.points]
    return [q for q in dict.fromkeys(given) if q is not None and q.is_file() and q.suffix != ".nwb"]


def _alike(a: Path, b: Path) -> bool:
    from leadline.base.fingerprint import fingerprint_path

    return a.samefile(b) or (a.stat().st_size == b.stat().st_size and fingerprint_path(a) == fingerprint_path(b))


def without_plan(brain: Brain) -> tuple[str, ...]:
    """What nothing in hand could tell."""
    if any(p.entry_near_um is not None for p in brain.penetrations):
        return ()
    return (
        "no penetration states entry_near_um, so nothing would show that left and right are exchanged (the two halves "
        "of a brain look alike)",
    )


def of_anchors(anchors: Iterable[Anchor], penetration: Penetration, probe: Probe) -> tuple[str, ...]:
    """Anchors far off the contacts of their probe."""
    if not len(probe.contact_id):
        return ()
    low, high = float(probe.tip_distance_um.min()), float(probe.tip_distance_um.max())
    return tuple(
        f"penetration {penetration.name}: an anchor stands at tip distance {a.tip_distance_um:g} um, contacts from "
        f"{low:.0f} to {high:.0f} um: is it in um, and of this probe?"
        for a in anchors
        if a.penetration == penetration.name
        and not low - BEYOND_PROBE_UM <= a.tip_distance_um <= high + BEYOND_PROBE_UM
    )


def of_tracks(
    bench: Bench, tracks: Sequence[Track], paths: Sequence[TracedPath], wanted: Sequence[Wanted]
) -> tuple[str, ...]:
    """Tracks that run outside the brain; entries that fit the plans better in another reading.

    ``paths`` : all that was found or drawn, also what belongs to no penetration. ``wanted`` : every penetration.
    """
    from leadline.tracing.plans import doubts

    atlas = bench.atlas
    out = []
    for track in tracks:
        along = track.atlas_at(np.linspace(0.0, track.length_um, 100))
        share = float((atlas.label_at(along) == 0).mean())
        if share > OUTSIDE_SHARE:
            out.append(
                f"penetration {track.penetration}, shank {track.shank}: {share:.0%} of its track lies outside the "
                "brain; look at the registration, and at whether points are um along the stored axes, in their order"
            )
    return (*out, *doubts(wanted, paths, _middle_um(atlas)))


def of_places(bench: Bench, evidence: Sequence[ShankEvidence]) -> tuple[str, ...]:
    """What recordings and insertion depths say against the tracks that they were given."""
    from leadline.anchoring.contradiction import Listener, exchanged, misplaced, upside_down

    out = [s for shank in evidence for s in misplaced(shank)]
    if not bench.brain.settings.anchor.physiology:
        return tuple(out)
    listener = Listener(bench.atlas.structures, bench.knowledge)
    names = dict.fromkeys(s.penetration for s in evidence)
    probes = [[s for s in evidence if s.penetration == name] for name in names]
    return (*out, *(s for probe in probes for s in upside_down(probe, listener)), *exchanged(probes, listener))


def _of_insertion(penetration: Penetration, probe: Probe) -> list[str]:
    out = []
    if len(probe.contact_id) > 1:
        span = float(np.hypot(np.ptp(probe.x_um), np.ptp(probe.y_um)))
        if not PROBE_UM[0] <= span <= PROBE_UM[1]:
            out.append(
                f"penetration {penetration.name}: the contacts of its probe span {span:g} um; look at si_units of the "
                "probe file"
            )
    inserted = penetration.inserted_um
    if inserted is not None and not INSERTED_UM[0] <= inserted <= INSERTED_UM[1]:
        out.append(f"penetration {penetration.name}: inserted_um is {inserted:g}; it is in micrometres")
    return out


def _middle_um(atlas: Atlas) -> float:
    """ml of the atlas's midline: the middle of all that is brain."""
    step = np.maximum(1, np.rint(COARSE_UM / atlas.voxel_um)).astype(int)
    inside = atlas.labels.array()[:: step[0], :: step[1], :: step[2]] > 0
    share = inside.sum(axis=(0, 1))
    return float((np.arange(share.size) * share).sum() / max(share.sum(), 1) * step[2] * atlas.voxel_um[2])


def _from_surface(atlas: Atlas, points_um: FloatArray) -> FloatArray:
    """Distance ``(n,)`` of atlas points from the nearest surface of the brain, um, to about 200 um."""
    from scipy.ndimage import binary_erosion
    from scipy.spatial import KDTree

    step = np.maximum(1, np.rint(COARSE_UM / atlas.voxel_um)).astype(int)
    inside = atlas.labels.array()[:: step[0], :: step[1], :: step[2]] > 0
    shell = np.argwhere(inside & ~binary_erosion(inside)) * step * atlas.voxel_um
    return np.asarray(KDTree(shell).query(points_um)[0], np.float64)

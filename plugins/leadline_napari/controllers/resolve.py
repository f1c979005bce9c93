"""From scene, session and answer to what the section shows: pure functions."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from leadline_napari.controllers.scene import colour_of
from leadline_napari.session import key_of
from leadline_napari.states import Band, InHand, Readout, Ribbon, Sites, Tie

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from leadline.base.arrays import AnyArray, FloatArray, IntArray
    from leadline.model.anchor import Anchor, Suggestion
    from leadline.model.atlas import Structures
    from leadline.pipeline.exact import ShankGround
    from leadline_napari.controllers.live import Live
    from leadline_napari.controllers.scene import Scene
    from leadline_napari.session import Session
    from leadline_napari.states import Lane, Stratum

SEGMENT_UM = 100.0
STRETCH_LOW, STRETCH_HIGH = 0.8, 1.25
NEAR_UM = 300.0


def band_of(live: Live, ties: tuple[Tie, ...]) -> Band:
    """The tie band: where the depth map leads, how it stretches, and a warning where that is improbable."""
    tip = live.posterior.tip_distance_um
    count = max(2, round(float(tip[-1] - tip[0]) / SEGMENT_UM) + 1)
    at = np.linspace(float(tip[0]), float(tip[-1]), count)
    depth = np.interp(at, tip, live.median_um)
    stretch = -np.diff(depth) / np.diff(at)
    words = stretch_words(at, stretch) or asked_words(live.anchors)
    return Band(at, depth, np.interp(at, tip, live.sd_um), stretch, ties, words)


def stretch_words(tip_um: FloatArray, stretch: FloatArray) -> str:
    """A warning where the local stretch leaves 0.8 to 1.25, '' where it does not."""
    odd = (stretch < STRETCH_LOW) | (stretch > STRETCH_HIGH)
    if not odd.any():
        return ""
    worst = int(np.argmax(np.where(odd, np.abs(np.log(np.maximum(stretch, 1e-3))), -1)))
    return (
        f"Stretch {stretch[worst]:.2f} at {tip_um[worst]:.0f}-{tip_um[worst + 1]:.0f} um from the tip; "
        f"tissue seldom goes beyond {STRETCH_LOW:g}-{STRETCH_HIGH:g}"
    )


def asked_words(anchors: Sequence[Anchor]) -> str:
    """A warning where two neighbouring anchors ask for more stretch than tissue shows, their own doubt allowed for."""
    ordered = sorted(anchors, key=lambda a: a.tip_distance_um)
    for low, high in pairwise(ordered):
        along, apart = high.tip_distance_um - low.tip_distance_um, low.track_depth_um - high.track_depth_um
        beyond = max(STRETCH_LOW * along - apart, apart - STRETCH_HIGH * along)
        if beyond > np.hypot(low.sd_um, high.sd_um):
            return (
                f"Anchors at {low.tip_distance_um:.0f} and {high.tip_distance_um:.0f} um ask for a stretch of "
                f"{apart / along:.2f}; tissue seldom goes beyond {STRETCH_LOW:g}-{STRETCH_HIGH:g}"
            )
    return ""


def ties_of(
    session: Session,
    suggestions: Iterable[Suggestion],
    second: Iterable[Anchor],
    dragged: tuple[Anchor, Anchor] | None = None,
    runs: Sequence[Stratum] = (),
) -> tuple[Tie, ...]:
    """Anchors of the shank in hand, open suggestions and a second reader's, each as a tie. ``dragged`` : an anchor of
    the session and what stands in its place while it is dragged. ``runs`` : strata that give labels their acronyms."""
    selection = session.selection
    here = (selection.penetration, selection.shank)
    ties = []
    for anchor in session.edits.anchors_of(*here):
        kind = "fixed" if anchor in session.fixed else anchor.source
        shown = dragged[1] if dragged and anchor == dragged[0] else anchor
        ties.append(Tie(shown, kind, tie_label(shown, runs), held=anchor == selection.anchor or shown is not anchor))
    for suggestion in open_suggestions(session, suggestions):
        a = suggestion.anchor
        ties.append(Tie(a, "suggested", tie_label(a, runs), held=a == selection.anchor, evidence=words_for(suggestion)))
    ties += [Tie(a, "second", tie_label(a, runs)) for a in second if (a.penetration, a.shank) == here]
    return tuple(ties)


def open_suggestions(session: Session, suggestions: Iterable[Suggestion]) -> tuple[Suggestion, ...]:
    """Suggestions of the shank in hand that were neither accepted nor refused."""
    here = (session.selection.penetration, session.selection.shank)
    taken = {key_of(a) for a in session.edits.anchors} | set(session.edits.refused)
    return tuple(
        s for s in suggestions if (s.anchor.penetration, s.anchor.shank) == here and key_of(s.anchor) not in taken
    )


def words_for(suggestion: Suggestion) -> str:
    """The evidence for a suggestion, in two sentences."""
    against = f"\nAgainst: {suggestion.against}" if suggestion.against else ""
    return f"For: {suggestion.support or 'nothing was written down'}{against}"


def tie_label(anchor: Anchor, runs: Sequence[Stratum] = ()) -> str:
    """What is written at a tie: its landmark, a structure's name in it as its acronym."""
    words = anchor.landmark or anchor.note or f"{anchor.track_depth_um:.0f} um"
    named = [run for run in runs if run.name and words.startswith(run.name)]
    if not named:
        return words
    run = max(named, key=lambda r: len(r.name))
    return f"{run.acronym}{words[len(run.name) :]}"


def in_hand_of(session: Session, ties: Sequence[Tie], scene: Scene, suggestions: Iterable[Suggestion]) -> InHand | None:
    """The anchor or suggestion in hand, with the names that could be given to it."""
    tie = next((t for t in ties if t.held), None)
    if tie is None:
        return None
    at = tie.anchor.track_depth_um
    borders = [
        (abs(lower.top_um - at), f"{upper.acronym} / {lower.acronym}") for upper, lower in pairwise(scene.strata.runs)
    ]
    near = [name for away, name in sorted(borders) if away < NEAR_UM]
    known = [s.anchor.landmark for s in suggestions if s.anchor.landmark]
    landmarks = tuple(dict.fromkeys([*near, *known]))
    return InHand(tie.anchor, tie.kind, tie.kind in ("user", "auto"), tie.evidence, landmarks)


def sites_of(scene: Scene, live: Live, structures: Structures, channel: int | None) -> Sites:
    """Contacts coloured by region."""
    contacts = scene.shank.contacts
    ids, codes = np.unique(live.contact_region, return_inverse=True)
    colours = np.array([colour_of(structures[int(i)]) for i in ids], np.uint8).reshape(-1, 3)
    return Sites(contacts.x_um, contacts.tip_distance_um, contacts.channel, colours[codes], channel)


def ribbon_of(scene: Scene, live: Live, structures: Structures) -> Ribbon:
    """Odds by row, structures in the order in which the track meets them."""
    odds = live.odds
    there = np.flatnonzero(odds.share.max(axis=0) > 0)
    order = there[np.argsort(_rank(scene.shank, odds.ids[there]), kind="stable")]
    rows = [structures[int(i)] for i in odds.ids[order]]
    return Ribbon(
        live.posterior.tip_distance_um,
        np.ascontiguousarray(odds.share[:, order]),
        np.array([colour_of(s) for s in rows], np.uint8),
        tuple(s.acronym for s in rows),
        live.exact,
    )


def _rank(shank: ShankGround, ids: IntArray) -> AnyArray:
    """Where along the track each structure lies, on average; ones that the track's copies never meet last."""
    mean = dict(zip(shank.table.ids.tolist(), shank.table.mean_cell.tolist(), strict=True))
    return np.array([mean.get(int(i), np.inf) for i in ids])


def readout_of(scene: Scene, live: Live, structures: Structures, lanes: Iterable[Lane], tip_um: float) -> Readout:
    """Region, layer, probability and values at a tip distance."""
    tip = live.posterior.tip_distance_um
    row = int(np.argmin(np.abs(tip - tip_um)))
    at = float(tip[row])
    depth = live.depth_at(at)
    contacts = scene.shank.contacts
    channels = contacts.channel[contacts.tip_distance_um == tip[row]]
    structure = structures[int(live.odds.region_id[row])]
    layer = f", layer {structure.layer}" if structure.layer else ""
    order = np.argsort(-live.odds.share[row], kind="stable")[:2]
    others = [k for k in order if live.odds.ids[k] != structure.id and live.odds.share[row, k] >= 0.01]
    rest = ""
    if others:
        rest = f" (else {structures[int(live.odds.ids[others[0]])].acronym} {live.odds.share[row, others[0]]:.2f})"
    values = " · ".join(
        f"{lane.title} {lane.values[k]:.3g} {lane.unit}".rstrip()
        for lane in lanes
        if lane.values.ndim == 1 and np.isfinite(lane.values[k := int(np.argmin(np.abs(lane.tip_um - at)))])
    )
    names = "/".join(str(c) for c in channels)
    head = f"channel {names} · {at:.0f} um from tip · depth {depth:.0f} ± {live.sd_um[row]:.0f} um"
    where = f"{structure.acronym}: {structure.name}{layer}, p {live.odds.p_region[row]:.2f}{rest}"
    return Readout(f"{head}\n{where}" + (f"\n{values}" if values else ""), depth, at)

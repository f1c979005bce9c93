"""The work of each stage: inputs from the bench, the stage's pure function, outputs to files, sentences back."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import write_text
from leadline.base.errors import LeadlineError
from leadline.model.track import HandTrack, Track
from leadline.pipeline import contradictions, products

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

    from leadline.model.anchor import Anchor
    from leadline.model.atlas import Atlas
    from leadline.model.brain import Brain, Penetration
    from leadline.model.posterior import DepthPosterior
    from leadline.model.probe import Probe
    from leadline.model.track import Trace
    from leadline.model.transform import PointTransform, Registration
    from leadline.model.volume import Volume
    from leadline.pipeline.bench import Bench
    from leadline.tracing.assign import TracedPath, Wanted


def register(bench: Bench, files: products.RegistrationFiles) -> tuple[str, ...]:
    """Stack to atlas, and the check of it."""
    from leadline.io.qc_picture import draw_qc
    from leadline.registration import stage

    settings = bench.brain.settings.register
    grain = settings.resolution_um / 2
    background = bench.reduced(bench.background, grain)
    dye = None if bench.dye is None else bench.reduced(bench.dye, grain)
    atlas = bench.atlas
    registration = stage.register(
        background,
        atlas.template,
        atlas.labels,
        settings=settings,
        dye=dye,
        progress=bench.progress,
    )
    registration = replace(
        registration, warnings=(*registration.warnings, *contradictions.of_registration(registration))
    )
    registration = _refined_by_pairs(bench.brain, registration)
    files.write(registration)
    draw_qc(files.picture, background, atlas, files.read())
    return registration.warnings


def _refined_by_pairs(brain: Brain, registration: Registration) -> Registration:
    """The registration bent to the places that a person named in stack and atlas, where there are any."""
    from leadline.io.points import read_pairs
    from leadline.registration.pairs import pair_errors, refined

    stack_um, atlas_um = read_pairs(brain.registration_pairs)
    if not len(stack_um):
        return registration
    errors = pair_errors(registration, stack_um, atlas_um)
    told = {
        "pairs": float(len(stack_um)),
        "pairs_before_um": round(float(np.median(errors.before_um)), 2),
        "pairs_after_um": round(float(np.median(errors.after_um)), 2),
        "pairs_left_out_um": round(float(np.median(errors.left_out_um)), 2),
    }
    bent = refined(registration, stack_um, atlas_um)
    return replace(bent, quality=bent.quality | told)


def trace(bench: Bench) -> tuple[str, ...]:
    """Dye tracks, each given to a penetration; hand-traced points and edited tracks where there are any."""
    from leadline.tracing.assign import TracedPath

    brain = bench.brain
    transform = products.RegistrationFiles(brain).read().stack_to_atlas
    grain = brain.settings.trace.resolution_um
    dye = None if bench.dye is None else bench.reduced(bench.dye, grain)
    background = bench.reduced(bench.background, grain)
    hand = _hand_tracks(brain, background, dye, transform)
    wanted = [w for p in brain.penetrations if p.points is None and (w := _wanted(p, hand)) is not None]
    found, missing, notes, paths = _dye_tracks(bench, wanted, background, dye, transform)
    order = {p.name: i for i, p in enumerate(brain.penetrations)}
    tracks = sorted([*hand.values(), *found], key=lambda t: (order[t.penetration], t.shank))
    products.write_tracks(brain, tracks, missing)
    paths += [TracedPath(t.atlas_um) for t in hand.values()]
    all_wanted = [w for p in brain.penetrations if (w := _wanted(p, {})) is not None]
    doubts = contradictions.of_tracks(bench, tracks, paths, all_wanted)
    return (*missing, *notes, *contradictions.of_insertions(bench), *doubts)


def _hand_tracks(
    brain: Brain, background: Volume, dye: Volume | None, transform: PointTransform
) -> dict[tuple[str, int], Track]:
    """Tracks that a person traced: the points files of brain.toml, and over them what was edited on the screen."""
    from leadline.io.points import read_hand_points, read_track_edits
    from leadline.tracing.fit import from_points

    drawn = {
        (p.name, shank): HandTrack(rows)
        for p in brain.penetrations
        if p.points is not None
        for shank, rows in read_hand_points(p.points).items()
    }
    names = {p.name for p in brain.penetrations}
    drawn |= {key: hand for key, hand in read_track_edits(brain.track_edits).items() if key[0] in names}
    return {
        (name, shank): _track(
            name, shank, from_points(hand.points_um, background, dye, entry_set=hand.entry_set), transform, "points"
        )
        for (name, shank), hand in drawn.items()
    }


def _wanted(penetration: Penetration, traced: Mapping[tuple[str, int], Track]) -> Wanted | None:
    """The shanks that still need a dye track; None where a person has traced them all."""
    from leadline.io.probes import read_probe
    from leadline.tracing.assign import Wanted

    probe = read_probe(penetration.probe, probe_index=penetration.probe_index, connected=False)
    shanks = tuple(s for s in probe.shanks if (penetration.name, s) not in traced)
    if not shanks:
        return None
    return Wanted(
        name=penetration.name,
        shank_x_um=tuple(float(probe.x_um[probe.shank == s].mean()) for s in shanks),
        entry_near_um=penetration.entry_near_um,
        shank_toward=penetration.shank_toward,
        inserted_um=penetration.inserted_um,
        shanks=shanks,
    )


def _dye_tracks(
    bench: Bench, wanted: Sequence[Wanted], background: Volume, dye: Volume | None, transform: PointTransform
) -> tuple[list[Track], tuple[str, ...], tuple[str, ...], list[TracedPath]]:
    """Tracks of penetrations, what is missing, notes, and all that was found."""
    from leadline.tracing import channels
    from leadline.tracing.assign import TracedPath, assign
    from leadline.tracing.find import trace as find

    if not wanted:
        return [], (), (), []
    if dye is None:
        why = "the brain has no dye channel, and the penetration no hand-traced points"
        return [], tuple(f"penetration '{w.name}' has no track: {why}" for w in wanted), (), []
    settings, progress = bench.brain.settings.trace, bench.progress
    traces = find(dye, background, settings=settings, progress=progress)
    exchanged = () if traces else channels.doubts(dye, background, settings=settings, progress=progress)
    paths = [TracedPath(transform(t.points_um), t.contrast) for t in traces]
    result = assign(paths, wanted)
    tracks = [_track(name, shank, traces[i], transform, "dye") for (name, shank), i in result.matches.items()]
    return tracks, result.missing, (*result.notes, *exchanged), paths


def _track(name: str, shank: int, traced: Trace, transform: PointTransform, source: str) -> Track:
    atlas_um = transform(traced.points_um)
    return Track(
        name, shank, traced.points_um, atlas_um, traced.radius_um, traced.entry_sd_um, traced.end_sd_um, source
    )


def profile(bench: Bench, penetration: Penetration, files: products.ProfileFiles) -> tuple[str, ...]:
    """One penetration's recording to its depth profile."""
    from leadline.io.profile_picture import draw_profiles
    from leadline.io.profiles import write_profile, write_spectra
    from leadline.physiology.profile import profile_of

    probe = bench.probe(penetration)
    found, spectra = profile_of(
        penetration.name,
        probe,
        bench.recordings(penetration, probe),
        settings=bench.brain.settings.profile,
        progress=bench.progress,
    )
    write_profile(files.table, found)
    write_spectra(files.spectra, spectra)
    draw_profiles(files.picture, found, spectra)
    return (*found.warnings, *contradictions.of_recordings(bench.brain, penetration))


def anchor(
    bench: Bench,
    anchors: tuple[Anchor, ...],
    *,
    in_force: Callable[[], tuple[Anchor, ...]],
    write: Callable[[], None],
) -> tuple[str, ...]:
    """The posterior over depth maps of every shank, and the anchors that it suggests.

    ``in_force`` : the anchors as they stand when it is called; an edit made meanwhile is not written over. ``write`` :
    writes ``anchors`` to their file.
    """
    from leadline.anchoring.suggest import suggest
    from leadline.io.tables import suggestions_text
    from leadline.model.anchor import in_order
    from leadline.pipeline.evidence import drawn, settled, shank_evidence

    brain = bench.brain
    for p, s in {(a.penetration, a.shank) for a in anchors}:
        in_order(a for a in anchors if (a.penetration, a.shank) == (p, s))
    evidence = shank_evidence(bench, products.read_tracks(brain)[0], anchors)
    draws = drawn(bench, evidence)
    at_most = brain.settings.anchor.suggestions
    suggestions = suggest(draws, evidence, bench.atlas.structures, bench.knowledge, at_most=at_most)
    posteriors = settled(bench, draws, evidence)
    products.write_posteriors(brain, posteriors)
    taken = {(a.penetration, a.shank, a.landmark) for a in anchors if a.landmark}
    open_ones = [s for s in suggestions if (s.anchor.penetration, s.anchor.shank, s.anchor.landmark) not in taken]
    if in_force() != anchors:
        raise LeadlineError(
            "changed while 'anchor' was at work; the edit is kept", where=str(brain.out / "anchors.csv"),
            mend="Run again: it goes on from what the file says now",
        )  # fmt: skip
    write()
    write_text(brain.out / "suggestions.csv", suggestions_text(open_ones))
    told = (f"penetration {p.penetration}, shank {p.shank}: {w}" for p in posteriors for w in p.warnings)
    return (*told, *contradictions.of_places(bench, evidence))


def locate(bench: Bench) -> tuple[str, ...]:
    """Every channel's region, layer and probability, as tables."""
    import pandas as pd

    from leadline.io.tables import read_anchors, write_table
    from leadline.locating.table import unlocated_rows
    from leadline.pipeline.laminar import with_cortical_depth, without_depth

    brain = bench.brain
    registration = products.RegistrationFiles(brain).read()
    tracks, _ = products.read_tracks(brain)
    track_of = {(t.penetration, t.shank): t for t in tracks}
    posterior_of = {(p.penetration, p.shank): p for p in products.read_posteriors(brain)}
    anchors = read_anchors(brain.out / "anchors.csv")
    channels, shares = [], []
    for penetration in brain.penetrations:
        probe = bench.probe(penetration)
        for shank in probe.shanks:
            key = (penetration.name, shank)
            contacts = probe.take(np.flatnonzero(probe.shank == shank))
            if key in posterior_of:
                rows, odds = _locate_shank(
                    brain, bench.atlas, contacts, track_of[key], posterior_of[key], registration, anchors
                )
                shares.append(odds)
            else:
                rows = unlocated_rows(brain.name, penetration.name, contacts, bench.atlas)
            channels.append(rows.iloc[np.argsort(contacts.channel, kind="stable")])
    table = with_cortical_depth(pd.concat(channels, ignore_index=True), bench)
    write_table(table, brain.out / "channels.csv")
    write_table(table, brain.out / "channels.parquet")
    if not shares:
        from leadline.model.channels import POSTERIOR_COLUMNS

        shares = [pd.DataFrame(columns=list(POSTERIOR_COLUMNS))]
    write_table(pd.concat(shares, ignore_index=True), brain.out / "posterior.parquet")
    return without_depth(table, bench)


def _locate_shank(
    brain: Brain,
    atlas: Atlas,
    contacts: Probe,
    track: Track,
    posterior: DepthPosterior,
    registration: Registration,
    anchors: Sequence[Anchor],
) -> tuple[Any, Any]:
    from leadline.locating.assign import locate as locate_contacts
    from leadline.locating.table import channel_rows, posterior_rows

    located = locate_contacts(
        contacts.tip_distance_um,
        track,
        posterior,
        atlas,
        [a for a in anchors if (a.penetration, a.shank) == (track.penetration, track.shank)],
        registration_error_um=registration.error_um,
        seed=brain.settings.locate.seed,
    )
    return (
        channel_rows(brain.name, track.penetration, contacts, atlas, located),
        posterior_rows(track.penetration, contacts, atlas, located),
    )

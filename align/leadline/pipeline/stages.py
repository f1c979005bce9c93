"""The table of stages: what each needs, reads, gives, and how it is run. The only place that knows the order."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from leadline.pipeline import products, work
from leadline.pipeline.in_force import anchors_in_force, write_in_force

if TYPE_CHECKING:
    from collections.abc import Callable

    from leadline.model.brain import Brain, Penetration
    from leadline.pipeline.bench import Bench
    from leadline.pipeline.record import Record

T = TypeVar("T")
STAGES = ("register", "trace", "profile", "anchor", "locate")


@dataclass(frozen=True)
class Step:
    """One piece of work that is done as a whole or not at all.

    ``key`` : settings and other values that the result depends on, beside ``reads`` (files) and ``needs`` (other
    steps). ``gives`` : files written. ``run`` : does it and returns sentences for the user.
    """

    name: str
    stage: str
    needs: tuple[str, ...]
    key: Any
    reads: tuple[Path, ...]
    gives: tuple[Path, ...]
    run: Callable[[Bench], tuple[str, ...]]


def plan(brain: Brain, record: Record) -> tuple[Step, ...]:
    """Every step of a brain, in order."""
    profiles = tuple(_profile(brain, p) for p in brain.penetrations if p.recordings)
    return (
        _register(brain),
        _trace(brain),
        *profiles,
        _anchor(brain, record, tuple(step.name for step in profiles)),
        _locate(brain),
    )


def _register(brain: Brain) -> Step:
    paths = products.RegistrationFiles(brain)
    stack = brain.stack
    pairs = brain.registration_pairs if brain.registration_pairs.is_file() else None
    return Step(
        "register",
        "register",
        (),
        key=(brain.settings.register, stack.voxel_um, stack.code, stack.background_channel, stack.dye_channel),
        reads=_present(brain.atlas, stack.background, stack.dye, pairs),
        gives=paths.all,
        run=lambda bench: work.register(bench, paths),
    )


def _trace(brain: Brain) -> Step:
    penetrations = [_pathless(dataclasses.replace(p, recordings=(), unit_table=None)) for p in brain.penetrations]
    stack = brain.stack
    edits = brain.track_edits if brain.track_edits.is_file() else None
    return Step(
        "trace",
        "trace",
        ("register",),
        key=(brain.settings.trace, penetrations, _pathless(stack)),
        reads=_present(
            stack.background,
            stack.dye,
            edits,
            *(p.points for p in brain.penetrations),
            *(p.probe for p in brain.penetrations),
        ),
        gives=(brain.out / "tracks.csv", brain.cache / "tracks.json"),
        run=work.trace,
    )


def _profile(brain: Brain, penetration: Penetration) -> Step:
    files = products.ProfileFiles(brain, penetration.name)
    reads = [penetration.probe]
    for source in penetration.recordings:
        files_of = (source.lfp, source.spikes, source.events, source.exclude, source.probe)
        reads += [p for p in files_of if p is not None]
    return Step(
        f"profile {penetration.name}",
        "profile",
        (),
        key=(
            brain.settings.profile,
            [_pathless(r) for r in penetration.recordings],
            penetration.tip_offset_um,
            penetration.probe_index,
        ),
        reads=tuple(reads),
        gives=files.all,
        run=lambda bench: work.profile(bench, penetration, files),
    )


def _anchor(brain: Brain, record: Record, profiles: tuple[str, ...]) -> Step:
    anchors = anchors_in_force(brain, record)
    return Step(
        "anchor",
        "anchor",
        ("register", "trace", *profiles),
        key=(brain.settings.anchor, anchors, [p.inserted_um for p in brain.penetrations]),
        reads=_present(brain.atlas, brain.knowledge, *_probe_files(brain)),
        gives=(brain.out / "anchors.csv", brain.out / "suggestions.csv", brain.cache / "posterior.npz"),
        run=lambda bench: work.anchor(
            bench,
            anchors,
            in_force=lambda: anchors_in_force(brain, record),
            write=lambda: write_in_force(brain, record, anchors),
        ),
    )


def _locate(brain: Brain) -> Step:
    return Step(
        "locate",
        "locate",
        ("register", "trace", "anchor"),
        key=(brain.settings.locate, brain.name, [p.name for p in brain.penetrations]),
        reads=_present(brain.atlas, *_probe_files(brain)),
        gives=(brain.out / "channels.csv", brain.out / "channels.parquet", brain.out / "posterior.parquet"),
        run=work.locate,
    )


def _probe_files(brain: Brain) -> tuple[Path | None, ...]:
    return tuple(path for p in brain.penetrations for path in (p.probe, *(r.probe for r in p.recordings)))


def _present(*paths: Path | None) -> tuple[Path, ...]:
    return tuple(dict.fromkeys(p for p in paths if p is not None))


def _pathless(value: T) -> T:
    """The value without its paths: where a brain's folder lies does not matter, what the files hold is looked at."""
    paths = [f.name for f in dataclasses.fields(value) if isinstance(getattr(value, f.name), Path)]  # type: ignore[arg-type]
    return dataclasses.replace(value, **dict.fromkeys(paths))  # type: ignore[type-var]

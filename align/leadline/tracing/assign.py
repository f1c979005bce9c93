"""Which track belongs to which penetration: shank count, planned entry and length, weighed together."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from leadline.base.arrays import FloatArray, frozen_points
from leadline.base.errors import LeadlineError
from leadline.model.frames import direction
from leadline.tracing.groups import Group, opposite, shank_groups, toward_letter

# common practice, no source: how well a planned entry is hit, registration included, and an insertion is measured
PLAN_SD_UM = 350.0
INSERTED_SD_UM = 200.0
INSERTED_SD_SHARE = 0.15
ROBUST_AT_SD = 3.0
MISSING_COST = 10.0
MISSING_SHANK_COST = 4.0
LEFT_OUT_COST = 6.0  # a track of another insertion hardly stands by chance where a shank of this probe would
CLEAR_COST = 2.0  # a second answer less than this behind the best, in log likelihood, is nearly as good


@dataclass(frozen=True, slots=True, eq=False)
class TracedPath:
    """A trace carried to the atlas. ``atlas_um`` : (n >= 2, 3) ap, dv, ml from the entry to the end of the dye."""

    atlas_um: FloatArray
    contrast: float = 0.0

    def __post_init__(self) -> None:
        object.__setattr__(self, "atlas_um", frozen_points(self.atlas_um, "TracedPath.atlas_um", min_rows=2))

    @property
    def length_um(self) -> float:
        """Arc length in atlas um."""
        return float(np.linalg.norm(np.diff(self.atlas_um, axis=0), axis=1).sum())


@dataclass(frozen=True, slots=True)
class Wanted:
    """A penetration that needs tracks.

    ``shank_x_um`` : place of each shank across the probe, um, in the order of ``shanks`` (their numbers, 0, 1, ...
    unless given). ``entry_near_um`` : planned entry in atlas um. ``shank_toward`` : anatomical letter in which shank
    numbers grow. ``inserted_um`` : length of the insertion.
    """

    name: str
    shank_x_um: tuple[float, ...] = (0.0,)
    entry_near_um: tuple[float, float, float] | None = None
    shank_toward: str | None = None
    inserted_um: float | None = None
    shanks: tuple[int, ...] = ()

    def __post_init__(self) -> None:
        object.__setattr__(self, "shanks", tuple(self.shanks) or tuple(range(len(self.shank_x_um))))
        if len(self.shanks) != len(self.shank_x_um) or not self.shanks:
            raise LeadlineError("a penetration needs one place for each shank", where=f"penetration '{self.name}'")


@dataclass(frozen=True, slots=True)
class Assignment:
    """Who got which trace.

    ``matches`` : (penetration, shank) to the index of its trace. ``missing`` : a message for each penetration that
    lacks a track. ``unused`` : traces that belong to none. ``notes`` : choices made and doubts, for the user.
    """

    matches: Mapping[tuple[str, int], int]
    missing: tuple[str, ...] = ()
    unused: tuple[int, ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class _Choice:
    """A way to serve one penetration: trace indices by shank position (None where missing), and its cost."""

    wanted: int
    slots: tuple[int | None, ...]
    cost: float
    group: Group | None = field(default=None, compare=False)

    @property
    def traces(self) -> frozenset[int]:
        return frozenset(i for i in self.slots if i is not None)


def assign(tracks: Sequence[TracedPath], wanted: Sequence[Wanted]) -> Assignment:
    """Match tracks to penetrations so that all of them together fit best.

    Every way to serve a penetration - one track, or a set of parallel tracks at the probe's spacing, or none - has a
    cost in log likelihood: the distance from the planned entry, the length against the insertion, the spacing and the
    parallelism of shanks. The cheapest set of ways that uses no track twice is found exactly (integer programme [1]_).

    Without ``shank_toward`` shank numbers grow to the posterior or to the right, whichever way the shanks lie, and
    the notes say so.

    .. [1] Huangfu & Hall (2018). Math. Program. Comput. 10, 119. doi:10.1007/s12532-017-0130-5
    """
    choices = [choice for w in range(len(wanted)) for choice in _choices(w, wanted[w], tracks)]
    best = _cheapest(choices, len(tracks), len(wanted))
    matches = {
        (wanted[c.wanted].name, shank): int(i)
        for c in best
        for shank, i in zip(wanted[c.wanted].shanks, c.slots, strict=True)
        if i is not None
    }
    owner = {i: key for key, i in matches.items()}
    notes = [
        note
        for c in best
        for note in (*_order_notes(wanted[c.wanted], c), *_rival_notes(c, best, choices, tracks, wanted))
    ]
    return Assignment(
        matches,
        tuple(m for c in best for m in _missing(wanted[c.wanted], c, tracks, owner)),
        tuple(i for i in range(len(tracks)) if i not in owner),
        tuple(notes),
    )


def least_cost(tracks: Sequence[TracedPath], wanted: Sequence[Wanted]) -> float:
    """What the best assignment costs, in log likelihood: little where entries, shanks and lengths fit."""
    choices = [choice for w in range(len(wanted)) for choice in _choices(w, wanted[w], tracks)]
    return float(sum(choice.cost for choice in _cheapest(choices, len(tracks), len(wanted))))


def _choices(w: int, wanted: Wanted, tracks: Sequence[TracedPath]) -> list[_Choice]:
    many = len(wanted.shanks)
    out = [_Choice(w, (None,) * many, MISSING_COST + MISSING_SHANK_COST * (many - 1))]
    for i, track in enumerate(tracks):
        if many == 1:
            out.append(_Choice(w, (i,), _fit(wanted, [track])))
    if many > 1:
        groups = shank_groups([t.atlas_um for t in tracks], wanted.shank_x_um, wanted.shank_toward)
        sets = [frozenset(i for i in group.slots if i is not None) for group in groups]
        alone = [g.cost + MISSING_SHANK_COST * (many - len(s)) for g, s in zip(groups, sets, strict=True)]
        for group, members, cost in zip(groups, sets, alone, strict=True):
            left_out = any(members < s and c < cost + CLEAR_COST for s, c in zip(sets, alone, strict=True))
            fit = _fit(wanted, [tracks[i] for i in sorted(members)])
            out.append(_Choice(w, group.slots, cost + fit + LEFT_OUT_COST * left_out, group))
    return out


def _fit(wanted: Wanted, used: Sequence[TracedPath]) -> float:
    """Cost of entry and length; clearer tracks win ties."""
    cost = -1e-3 * float(np.mean([min(t.contrast, 50.0) if np.isfinite(t.contrast) else 0.0 for t in used]))
    if wanted.entry_near_um is not None:
        cost += _robust(_from_plan(wanted, used) / PLAN_SD_UM)
    if wanted.inserted_um is not None:
        sd = INSERTED_SD_UM + INSERTED_SD_SHARE * wanted.inserted_um
        cost += min(_robust((float(np.median([t.length_um for t in used])) - wanted.inserted_um) / sd), 4.5)
    return cost


def _robust(z: float) -> float:
    """Half the square of a deviation in sd; beyond three sd it grows in a straight line (Huber)."""
    z = abs(z)
    return 0.5 * z * z if z <= ROBUST_AT_SD else ROBUST_AT_SD * (z - ROBUST_AT_SD / 2)


def _from_plan(wanted: Wanted, used: Sequence[TracedPath]) -> float:
    """Distance um of the planned entry from the entries: from their middle or the nearest shank, the plan may mean
    either."""
    entries = np.array([t.atlas_um[0] for t in used])
    plan = np.asarray(wanted.entry_near_um, float)
    places = np.vstack([entries, entries.mean(axis=0)])
    return float(np.linalg.norm(places - plan, axis=1).min())


def _cheapest(
    choices: Sequence[_Choice], tracks: int, wanted: int, forbidden: frozenset[int] = frozenset()
) -> list[_Choice]:
    """One choice for every penetration, no track twice, least cost in all."""
    from scipy.optimize import Bounds, LinearConstraint, milp

    if not wanted:
        return []
    rows = np.zeros((wanted + tracks, len(choices)))
    for k, choice in enumerate(choices):
        rows[choice.wanted, k] = 1
        rows[[wanted + i for i in choice.traces], k] = 1
    lower = np.concatenate([np.ones(wanted), np.zeros(tracks)])
    upper = np.array([0.0 if k in forbidden else 1.0 for k in range(len(choices))])
    answer = milp(
        np.array([c.cost for c in choices]),
        constraints=LinearConstraint(rows, lower, np.ones(wanted + tracks)),
        integrality=np.ones(len(choices)),
        bounds=Bounds(0, upper),
    )
    return [choice for choice, taken in zip(choices, answer.x, strict=True) if taken > 0.5]


def _rival_notes(
    choice: _Choice,
    best: Sequence[_Choice],
    choices: Sequence[_Choice],
    tracks: Sequence[TracedPath],
    wanted: Sequence[Wanted],
) -> list[str]:
    """Say when other tracks would have served a penetration nearly as well."""
    if not choice.traces:
        return []
    same = frozenset(k for k, c in enumerate(choices) if c.wanted == choice.wanted and c.traces == choice.traces)
    second = _cheapest(choices, len(tracks), len(wanted), same)
    behind = sum(c.cost for c in second) - sum(c.cost for c in best)
    rival = next(c for c in second if c.wanted == choice.wanted)
    if behind >= CLEAR_COST or not rival.traces:
        return []
    need = wanted[choice.wanted]
    mend = "set" if need.entry_near_um is None else "check"
    return [
        f"Penetration '{need.name}': {_described(choice, tracks, need)} was taken, "
        f"{_described(rival, tracks, need)} fits nearly as well (odds {np.exp(max(behind, 0)):.1f} to 1); {mend} "
        f"entry_near_um in brain.toml to settle it"
    ]


def _described(choice: _Choice, tracks: Sequence[TracedPath], wanted: Wanted) -> str:
    """Tracks with their entry, length and distance from the plan."""
    used = [tracks[i] for i in choice.slots if i is not None]
    names = ", ".join(str(i) for i in choice.slots if i is not None)
    head = f"track {names}" if len(used) == 1 else f"tracks {names}"
    text = f"{head} (entry {_place(np.mean([t.atlas_um[0] for t in used], axis=0))}, "
    text += f"{np.median([t.length_um for t in used]):.0f} um long"
    if wanted.entry_near_um is not None:
        text += f", {_from_plan(wanted, used):.0f} um from the plan"
    return text + ")"


def _order_notes(wanted: Wanted, choice: _Choice) -> list[str]:
    """Say which way the shank numbers were taken to grow, and how to overrule it."""
    group = choice.group
    if group is None or len(choice.traces) < 2:
        return []
    letter = toward_letter(group.way)
    if wanted.shank_toward is None:
        why = "the spacing says so" if group.decided else "nothing says which way they grow"
        return [
            f"Penetration '{wanted.name}': shank numbers are taken to grow towards {letter} ({why}); if they grow the "
            f'other way, write shank_toward = "{opposite(letter)}" in brain.toml'
        ]
    across = abs(float(group.way @ direction(wanted.shank_toward)))
    if across < 0.35:
        return [
            f"Penetration '{wanted.name}': its shanks lie along {opposite(letter)}-{letter}, so shank_toward = "
            f'"{wanted.shank_toward}" says little about their order; write "{letter}" or "{opposite(letter)}"'
        ]
    return []


def _missing(
    wanted: Wanted, choice: _Choice, tracks: Sequence[TracedPath], owner: Mapping[int, tuple[str, int]]
) -> list[str]:
    absent = [s for s, i in zip(wanted.shanks, choice.slots, strict=True) if i is None]
    if not absent:
        return []
    many = len(wanted.shanks)
    if len(absent) == many:
        what = "no track was found" if many == 1 else f"no {many} parallel tracks at the probe's spacing were found"
    else:
        what = f"no track was found for shank {', '.join(map(str, absent))}"
    plan = "" if wanted.entry_near_um is None else f" (planned entry {_place(np.asarray(wanted.entry_near_um))})"
    return [f"Penetration '{wanted.name}'{plan}: {what}. {_found(wanted, tracks, owner)}"]


def _found(wanted: Wanted, tracks: Sequence[TracedPath], owner: Mapping[int, tuple[str, int]]) -> str:
    if not tracks:
        return "The stack shows no track at all"
    lines = []
    for i, track in enumerate(tracks):
        text = f"track {i} at {_place(track.atlas_um[0])}"
        if wanted.entry_near_um is not None:
            text += f", {_from_plan(wanted, [track]):.0f} um from the plan"
        if i in owner:
            text += f", taken by '{owner[i][0]}' shank {owner[i][1]}"
        lines.append(text)
    many = "s" if len(tracks) > 1 else ""
    return f"Found {len(tracks)} track{many}, entries in atlas um (ap, dv, ml): " + "; ".join(lines)


def _place(point: FloatArray) -> str:
    return "[" + ", ".join(f"{v:.0f}" for v in point) + "]"

"""Tracks redrawn and registrations corrected by hand: every change saved at once, its effect shown at once."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

import numpy as np

from leadline.base.atomic import write_text
from leadline.base.errors import LeadlineError
from leadline.io.points import pairs_text, read_pairs
from leadline.model.track import Track
from leadline.registration.pairs import pair_errors, refined
from leadline.tracing.fit import from_points
from leadline.tracing.snap import snapped
from leadline_napari.session import DrawTrack, ForgetTrack, Pair, SetPairs, TrackEdit
from leadline_napari.states import CorrectionState

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from leadline.base.arrays import FloatArray
    from leadline.model.transform import Registration
    from leadline.pipeline.bench import Bench
    from leadline_napari.controllers.desk import Desk, Runner
    from leadline_napari.results import Results
    from leadline_napari.session import Session

HANDLES = 8
REFIT_UM = 40.0
SNAP_UM = 10.0


class View(Protocol):
    """What the corrections view can be told."""

    def show_state(self, state: CorrectionState) -> None:
        """Draw."""


def handles_of(track: Track, count: int = HANDLES) -> FloatArray:
    """Points along a track ``(count, 3)`` that a person can move, the entry first and the end last."""
    return track.stack_at(np.linspace(0.0, track.length_um, count))


def ordered(points_um: FloatArray) -> FloatArray:
    """Points in order along their main direction; the end nearer to the first point given comes first."""
    points = np.asarray(points_um, float)
    middle = points.mean(axis=0)
    place = (points - middle) @ np.linalg.svd(points - middle, full_matrices=False)[2][0]
    order = np.argsort(place, kind="stable")
    return points[order if np.argmin(order) < len(order) / 2 else order[::-1]]


def ended(points_um: FloatArray, which: str, at_um: FloatArray) -> FloatArray:
    """A track whose entry ('entry') or tip ('end') is at a place: the outermost point goes there, and others that lie
    beyond it along the track are left out."""
    points = np.array(points_um if which == "entry" else points_um[::-1])
    way = points[-1] - points[0]
    within = (points[1:-1] - at_um) @ way > 0
    points = np.vstack([at_um, points[1:-1][within], points[-1]])
    return points if which == "entry" else points[::-1]


class CorrectionController:
    """Wires the corrections dock: the track in hand, and pairs of places in stack and atlas.

    ``retraced(track)`` is called with a refitted track, ``edited(points)`` when other hands moved the points (undo).
    """

    def __init__(
        self, desk: Desk, view: View, runner: Runner, tell: Callable[[str], None],
        retraced: Callable[[Track], None], edited: Callable[[FloatArray], None], paired: Callable[[], None],
    ) -> None:  # fmt: skip
        self.desk, self.view, self.runner, self.tell = desk, view, runner, tell
        self.retraced, self.edited, self.paired = retraced, edited, paired
        self.bench: Bench | None = None
        self.results: Results | None = None
        self.editing: tuple[str, int] | None = None
        self.draft: tuple[Pair, ...] = ()
        self.errors = ""
        desk.listen(self._session_changed)

    def open(self, bench: Bench, results: Results) -> None:
        """Take the products of a brain and the pairs that were being set."""
        self.bench, self.results = bench, results
        self.draft = self._read_draft()
        self._weigh()
        self._show()

    # -- tracks -------------------------------------------------------------------------------------------------

    @property
    def key(self) -> tuple[str, int]:
        """The shank in hand."""
        return self.desk.session.selection.penetration, self.desk.session.selection.shank

    def begin(self) -> FloatArray | None:
        """Begin to edit the track in hand; its points, none yet where the dye was not found, None with no brain."""
        if self.results is None or self.results.registration is None or not self.key[0]:
            self.tell("Tracks can be drawn once the brain is registered: run 'Register' in the Brain dock")
            return None
        self.editing = self.key
        self._show()
        points = self._points(self.key)
        return np.zeros((0, 3)) if points is None else points

    def end(self) -> None:
        """Stop editing."""
        self.editing = None
        self._show()

    def draw(self, points_um: FloatArray, *, entry_set: bool = False) -> None:
        """The hand's points are now these; saved, and refitted off the screen. An entry that was set by hand stays so
        until its point is taken away or another comes before it."""
        if self.editing is None or len(points_um) < 2:
            return
        points = tuple(_point(p) for p in ordered(points_um))
        old = self.desk.session.edits.track_of(*self.editing)
        kept = (
            old is not None and old.entry_set and (len(points) == len(old.points_um) or points[0] == old.points_um[0])
        )
        edit = TrackEdit(*self.editing, points, entry_set or kept)
        self._hear(lambda: self.desk.act(DrawTrack(edit)))

    def set_end(self, which: str, at_um: FloatArray) -> None:
        """Put the entry ('entry') or the tip ('end') of the track being edited at a place, and leave out points that
        would lie beyond it."""
        points = self._points(self.editing)
        if points is None:
            self.tell("Begin to edit a track first")
            return
        points = ended(points, which, np.asarray(at_um, float))
        self.draw(points, entry_set=which == "entry")
        self.edited(ordered(points).round(2))

    def snap(self) -> None:
        """Draw the hand's points to the centre of the dye."""
        bench, key, points = self.bench, self.editing, self._points(self.editing)
        if bench is None or key is None or points is None:
            self.tell("Begin to edit a track first")
            return
        if bench.dye is None:
            self.tell("The brain has no dye channel to snap to")
            return
        dye = bench.dye.fitting(SNAP_UM)
        self.runner.submit("snap", lambda: snapped(points, dye), lambda found: self._snapped(key, found), self.tell)

    def _points(self, key: tuple[str, int] | None) -> FloatArray | None:
        """Points of a track: the hand's, else some along the traced dye."""
        if key is None:
            return None
        edit = self.desk.session.edits.track_of(*key)
        if edit is not None:
            return np.array(edit.points_um)
        track = self.results.tracks.get(key) if self.results else None
        return None if track is None else handles_of(track)

    def _snapped(self, key: tuple[str, int], found: object) -> None:
        if key == self.editing:
            self.draw(np.asarray(found))
            self.edited(np.asarray(found))

    def forget(self) -> None:
        """Return the shank in hand to its traced dye, at the next run."""
        self._hear(lambda: self.desk.act(ForgetTrack(*self.key)))
        self.end()

    def _session_changed(self, before: Session, after: Session) -> None:
        if before.edits.tracks != after.edits.tracks:
            for edit in after.edits.tracks:
                if edit not in before.edits.tracks:
                    self._refit(edit)
            drawn = after.edits.track_of(*self.editing) if self.editing is not None else None
            if drawn is not None:
                self.edited(np.array(drawn.points_um))
        if before.edits.pairs != after.edits.pairs:
            self._weigh()
        self._show()

    def _refit(self, edit: TrackEdit) -> None:
        bench, registration = self.bench, self.results.registration if self.results else None
        if bench is None or registration is None:
            return
        self.runner.submit("refit", lambda: refit(bench, registration, edit), self._refitted, self.tell)

    def _refitted(self, track: object) -> None:
        assert isinstance(track, Track)
        self.retraced(track)

    # -- pairs --------------------------------------------------------------------------------------------------

    def add_pair(self, stack_um: FloatArray, atlas_um: FloatArray) -> None:
        """A place in the stack and the atlas place that it is."""
        self._draft_is((*self.draft, Pair(_point(stack_um), _point(atlas_um))))

    def move_pair(self, index: int, stack_um: FloatArray | None, atlas_um: FloatArray | None) -> None:
        """An end of a pair was moved."""
        old = self.draft[index]
        new = Pair(
            old.stack_um if stack_um is None else _point(stack_um),
            old.atlas_um if atlas_um is None else _point(atlas_um),
        )
        self._draft_is((*self.draft[:index], new, *self.draft[index + 1 :]))

    def delete_pair(self, index: int) -> None:
        """Take a pair away."""
        self._draft_is((*self.draft[:index], *self.draft[index + 1 :]))

    def accept_pairs(self) -> None:
        """From the next run on, the registration is refined by the pairs that are set."""
        self._hear(lambda: self.desk.act(SetPairs(self.draft)))

    def withdraw_pairs(self) -> None:
        """From the next run on, the registration is used as it was found."""
        self._hear(lambda: self.desk.act(SetPairs(())))

    def preview(self) -> Registration | None:
        """The registration as the pairs set so far would refine it."""
        found = self.results.registration if self.results else None
        return None if found is None else refined(found, *_arrays(self.draft))

    def _draft_is(self, pairs: tuple[Pair, ...]) -> None:
        self.draft = pairs
        write_text(self._draft_file(), pairs_text(*_arrays(pairs)))
        self._weigh()
        self._show()
        self.paired()

    def _draft_file(self) -> Path:
        return self.desk.brain.cache / "pairs.csv"

    def _read_draft(self) -> tuple[Pair, ...]:
        file = self._draft_file()
        if not file.is_file():
            return self.desk.session.edits.pairs
        return tuple(Pair(_point(s), _point(a)) for s, a in zip(*read_pairs(file), strict=True))

    def _weigh(self) -> None:
        """Work out the error at the pairs, before and after."""
        registration = self.results.registration if self.results else None
        if registration is None or not self.draft:
            self.errors = ""
            return
        try:
            found = pair_errors(registration, *_arrays(self.draft))
        except LeadlineError as error:
            self.errors = str(error)
            return
        words = f"{np.median(found.before_um):.0f} um before, {np.median(found.after_um):.0f} um after"
        if len(self.draft) > 1:
            words += f", {np.median(found.left_out_um):.0f} um where a pair is left out"
        self.errors = f"Median distance at {len(self.draft)} pair{'s' * (len(self.draft) > 1)}: {words}"

    # -- inside -------------------------------------------------------------------------------------------------

    def _hear(self, do: Callable[[], None]) -> None:
        try:
            do()
        except LeadlineError as error:
            self.tell(str(error))

    def _show(self) -> None:
        edits = self.desk.session.edits
        name, shank = self.key
        drawn = edits.track_of(name, shank)
        self.view.show_state(
            CorrectionState(
                title=f"{name}, shank {shank}" if name else "",
                editing=self.editing is not None and self.editing == self.key,
                by_hand=drawn is not None,
                entry_set=drawn is not None and drawn.entry_set,
                can_edit=bool(name) and self.results is not None and self.results.registration is not None,
                pairs=tuple(_words(p) for p in self.draft),
                errors=self.errors,
                in_force=bool(edits.pairs),
                same=edits.pairs == self.draft,
                registered=self.results is not None and self.results.registration is not None,
            )
        )


def refit(bench: Bench, registration: Registration, edit: TrackEdit) -> Track:
    """The track through the hand's points, as tracing would fit it, on a coarse background; no dye is looked at."""
    background = bench.reduced(bench.background, REFIT_UM)
    trace = from_points(np.array(edit.points_um), background, entry_set=edit.entry_set)
    atlas_um = registration.stack_to_atlas(trace.points_um)
    ends = (trace.entry_sd_um, trace.end_sd_um)
    return Track(edit.penetration, edit.shank, trace.points_um, atlas_um, trace.radius_um, *ends, "points")


def _arrays(pairs: tuple[Pair, ...]) -> tuple[FloatArray, FloatArray]:
    return (
        np.array([p.stack_um for p in pairs], float).reshape(-1, 3),
        np.array([p.atlas_um for p in pairs], float).reshape(-1, 3),
    )


def _point(values: FloatArray) -> tuple[float, float, float]:
    a, b, c = (round(float(v), 2) for v in values)
    return a, b, c


def _words(pair: Pair) -> str:
    s, a = pair.stack_um, pair.atlas_um
    return f"stack {s[0]:.0f}, {s[1]:.0f}, {s[2]:.0f}  →  atlas {a[0]:.0f}, {a[1]:.0f}, {a[2]:.0f}"

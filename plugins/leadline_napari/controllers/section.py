"""The section dock's mind: one shank, its anchors, the answer that follows every edit."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Protocol

from leadline.base.errors import LeadlineError
from leadline.model.anchor import DEFAULT_SD_UM, Anchor
from leadline_napari.controllers.answers import Answers
from leadline_napari.controllers.lanes import SHOWN_FIRST, chosen, with_range
from leadline_napari.controllers.placing import moved, nearest_row, onto_border
from leadline_napari.controllers.resolve import (
    band_of,
    in_hand_of,
    open_suggestions,
    readout_of,
    ribbon_of,
    sites_of,
    ties_of,
)
from leadline_napari.session import (
    AcceptSuggestion,
    AddAnchor,
    ChangeAnchor,
    DeleteAnchor,
    RefuseSuggestion,
    RestoreSuggestions,
    SelectAnchor,
    SelectChannel,
    SelectShank,
)
from leadline_napari.states import SectionState

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from pathlib import Path

    from leadline.pipeline.bench import Bench
    from leadline_napari.controllers.desk import Desk, Runner
    from leadline_napari.controllers.live import Live
    from leadline_napari.controllers.scene import Scene
    from leadline_napari.results import Results
    from leadline_napari.session import Action, Session
    from leadline_napari.states import Lane, Readout, Ribbon, Tie


class View(Protocol):
    """What the section view can be told."""

    def show(self, state: SectionState) -> None:
        """Draw; parts that are the same object as before stay as they are."""

    def show_readout(self, readout: Readout | None) -> None:
        """Tell what lies under the cursor."""


class SectionController:
    """Wires session, scene and answer to the view. Methods named after what the user did; none raises LeadlineError:
    ``tell`` gets the words."""

    def __init__(self, desk: Desk, view: View, runner: Runner, tell: Callable[[str], None]) -> None:
        self.desk, self.view, self.tell = desk, view, tell
        self.answers = Answers(runner, tell)
        self.answers.changed = self._show
        self.answers.busy = lambda: self.drag is not None
        self.bench: Bench | None = None
        self.results: Results | None = None
        self.second: tuple[Anchor, ...] = ()
        self.drag: tuple[Anchor, Anchor] | None = None
        self.lane_names: tuple[str, ...] = SHOWN_FIRST
        self.ranges: dict[str, tuple[float, float]] = {}
        self.tissue = 0
        self._lanes_of: tuple[object, tuple[Lane, ...]] | None = None
        self._ribbon: tuple[Live, Ribbon] | None = None
        self.state = SectionState()
        desk.listen(self._session_changed)

    @property
    def scene(self) -> Scene | None:
        """The shank in hand, laid out."""
        return self.answers.scene

    @property
    def live(self) -> Live | None:
        """The answer on the screen."""
        return self.answers.live

    # -- what is laid out ---------------------------------------------------------------------------------------

    def open(self, bench: Bench, results: Results) -> None:
        """Take the products of a brain; lay out the shank in hand again."""
        self.bench, self.results = bench, results
        selection = self.desk.session.selection
        keys = sorted(results.tracks)
        if keys and not selection.penetration:
            self.desk.act(SelectShank(*keys[0]))
        else:
            self._lay_out()

    def select_shank(self, penetration: str, shank: int) -> None:
        """Take a shank in hand."""
        self._act(SelectShank(penetration, shank))

    def _lay_out(self) -> None:
        self.drag = None
        self.answers.clear()
        self._show()
        if self.bench is not None and self.results is not None and self._key()[0]:
            self.answers.lay_out(self.bench, self.results, self._key(), lambda: self.desk.session.edits.anchors)

    def _session_changed(self, before: Session, after: Session) -> None:
        old, new = before.selection, after.selection
        if (old.penetration, old.shank) != (new.penetration, new.shank):
            self._lay_out()
            return
        if before.edits.anchors != after.edits.anchors and self.scene is not None:
            self.answers.preview(self._anchors())
            self.answers.ask(after.edits.anchors)
        self._show()

    # -- anchors ------------------------------------------------------------------------------------------------

    def add_at(self, side: str, um: float) -> None:
        """Double-click: an anchor at a track depth (``side`` 'depth') or a tip distance ('tip'), on the depth map."""
        if self.scene is None or self.live is None:
            return
        name, shank = self._key()
        if side == "depth":
            depth, landmark = onto_border(self.scene.strata, um)
            tip = self.live.tip_at(depth)
        else:
            tip = nearest_row(self.scene.shank.evidence.tip_distance_um, um)
            depth, landmark = self.live.depth_at(tip), ""
        self._act(AddAnchor(Anchor(name, shank, round(tip, 1), round(depth, 1), DEFAULT_SD_UM, landmark)))

    def choose(self, anchor: Anchor | None) -> None:
        """Take an anchor or a suggestion in hand."""
        self._act(SelectAnchor(anchor))

    def step(self, by: int) -> None:
        """Take the next (1) or the previous (-1) anchor or suggestion in hand, from the surface down."""
        ties = sorted((t for t in self._ties() if t.kind != "second"), key=lambda t: t.anchor.track_depth_um)
        if not ties:
            return
        held = next((i for i, t in enumerate(ties) if t.held), -1 if by > 0 else 0)
        self.choose(ties[(held + by) % len(ties)].anchor)

    def drag_to(self, anchor: Anchor, end: str, um: float) -> None:
        """An end of an anchor is being dragged to a track depth (``end`` 'depth') or a tip distance ('tip')."""
        origin = self.drag[0] if self.drag else anchor
        if self.scene is None or origin in self.desk.session.fixed or origin not in self.desk.session.edits.anchors:
            return
        at = nearest_row(self.scene.shank.evidence.tip_distance_um, um) if end == "tip" else um
        shown = moved(origin, end, at, self._anchors())
        self.drag = (origin, shown)
        self.answers.preview(tuple(shown if a == origin else a for a in self._anchors()))
        self._show()

    def drop(self) -> None:
        """The mouse was released: the dragged anchor stays where it is."""
        if self.drag is None:
            return
        origin, shown = self.drag
        self.drag = None
        if shown != origin:
            self._act(ChangeAnchor(origin, shown))
        else:
            self.answers.preview(self._anchors())
            self._show()

    def nudge(self, end: str, by_um: float) -> None:
        """Move an end of the anchor in hand a little."""
        anchor = self.desk.session.selection.anchor
        if anchor is None or anchor not in self.desk.session.edits.anchors:
            return
        at = anchor.track_depth_um if end == "depth" else anchor.tip_distance_um
        self._act(ChangeAnchor(anchor, moved(anchor, end, at + by_um, self._anchors())))

    def change(self, anchor: Anchor, new: Anchor) -> None:
        """The anchor in hand was relabelled or given another sd."""
        if new != anchor:
            self._act(ChangeAnchor(anchor, new))

    def delete(self) -> None:
        """Delete the anchor in hand; refuse it where it is a suggestion."""
        anchor = self.desk.session.selection.anchor
        if anchor is not None:
            mine = anchor in self.desk.session.edits.anchors
            self._act(DeleteAnchor(anchor) if mine else RefuseSuggestion(anchor))

    def accept(self) -> None:
        """Make the suggestion in hand an anchor."""
        anchor = self.desk.session.selection.anchor
        if anchor is not None and anchor not in self.desk.session.edits.anchors:
            self._act(AcceptSuggestion(anchor))

    def restore_suggestions(self) -> None:
        """Show the refused suggestions of this shank again."""
        self._act(RestoreSuggestions(*self._key()))

    def undo(self) -> None:
        """One step back."""
        self._hear(self.desk.undo)

    def redo(self) -> None:
        """One step forward."""
        self._hear(self.desk.redo)

    def show_second(self, path: Path | None) -> None:
        """Show another reader's anchors beside one's own."""
        from leadline.io.tables import read_anchors

        def read() -> None:
            self.second = read_anchors(path) if path else ()

        self._hear(read)
        self._show()

    # -- looking ------------------------------------------------------------------------------------------------

    def hover(self, side: str, um: float | None) -> None:
        """The cursor is at a track depth or a tip distance, or has left."""
        if um is None or self.live is None or self.scene is None or self.bench is None:
            self.view.show_readout(None)
            return
        tip = um if side == "tip" else self.live.tip_at(um)
        structures = self.bench.atlas.structures
        self.view.show_readout(readout_of(self.scene, self.live, structures, self.state.lanes, tip))

    def pick(self, tip_um: float, x_um: float | None = None) -> None:
        """Take the contact nearest to a place in hand."""
        if self.scene is None:
            return
        contacts = self.scene.shank.contacts
        away = abs(contacts.tip_distance_um - tip_um)
        if x_um is not None:
            away = away + abs(contacts.x_um - x_um)
        self._act(SelectChannel(int(contacts.channel[int(away.argmin())])))

    def show_lanes(self, names: Sequence[str]) -> None:
        """Show these physiology lanes, in this order."""
        self.lane_names = tuple(names)
        self._show()

    def set_range(self, name: str, low_percent: float, high_percent: float) -> None:
        """Set a lane's range as percentiles of its values."""
        self.ranges[name] = (low_percent, high_percent)
        self._show()

    def show_tissue(self, index: int) -> None:
        """Choose what the tissue lane shows."""
        self.tissue = index
        self._show()

    # -- inside -------------------------------------------------------------------------------------------------

    def _key(self) -> tuple[str, int]:
        return self.desk.session.selection.penetration, self.desk.session.selection.shank

    def _of_shank(self, anchors: tuple[Anchor, ...]) -> tuple[Anchor, ...]:
        return tuple(a for a in anchors if (a.penetration, a.shank) == self._key())

    def _anchors(self) -> tuple[Anchor, ...]:
        return self._of_shank(self.desk.session.edits.anchors)

    def _ties(self) -> tuple[Tie, ...]:
        suggestions = self.results.suggestions if self.results else ()
        return ties_of(
            self.desk.session, suggestions, self.second, self.drag, self.scene.strata.runs if self.scene else ()
        )

    def _act(self, action: Action) -> None:
        self._hear(lambda: self.desk.act(action))

    def _hear(self, do: Callable[[], None]) -> None:
        try:
            do()
        except LeadlineError as error:
            self.tell(str(error))
            self._show()

    def _show(self) -> None:
        self.state = self._resolved()
        self.view.show(self.state)

    def _resolved(self) -> SectionState:
        session, results = self.desk.session, self.results
        head = SectionState(
            title=_title(*self._key()),
            can_undo=self.desk.can_undo,
            can_redo=self.desk.can_redo,
            shanks=tuple(sorted(results.tracks)) if results else (),
            shank=self._key(),
            message=self._message(),
        )
        scene, live = self.scene, self.live
        if scene is None or self.bench is None:
            return head
        lanes = self._lanes(scene)
        laid = replace(
            head,
            end_um=scene.end_um,
            top_um=scene.top_um,
            bottom_um=scene.bottom_um,
            tissue=scene.tissues[self.tissue],
            strata=scene.strata,
            lanes=lanes,
        )
        if live is None:
            return laid
        ties = self._ties()
        structures = self.bench.atlas.structures
        suggestions = open_suggestions(session, results.suggestions if results else ())
        if self._ribbon is None or self._ribbon[0] is not live:
            self._ribbon = (live, ribbon_of(scene, live, structures))
        return replace(
            laid,
            band=band_of(live, ties),
            sites=sites_of(scene, live, structures, session.selection.channel),
            ribbon=self._ribbon[1],
            in_hand=in_hand_of(session, ties, scene, suggestions),
        )

    def _lanes(self, scene: Scene) -> tuple[Lane, ...]:
        """The chosen lanes; the same object while nothing about them changed."""
        key = (scene, self.lane_names, tuple(sorted(self.ranges.items())))
        if self._lanes_of and self._lanes_of[0] == key:
            return self._lanes_of[1]
        lanes = tuple(
            with_range(lane, *self.ranges[lane.name]) if lane.name in self.ranges else lane
            for lane in chosen(scene.lanes, self.lane_names)
        )
        self._lanes_of = (key, lanes)
        return lanes

    def _message(self) -> str:
        if self.results is None:
            return "Opening the brain …"
        if not self.results.tracks:
            return "No track yet: run 'Trace' in the Brain dock"
        if self._key() not in self.results.tracks:
            return "This shank has no track: draw it in the Corrections dock ('Edit this track')"
        if self.scene is None:
            return "Laying out the shank …"
        return "" if self.live is not None else "Working out the depth map …"


def _title(penetration: str, shank: int) -> str:
    return f"{penetration}, shank {shank}" if penetration else ""

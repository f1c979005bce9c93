"""Every decision of the user in one frozen value; every edit is an action; ``reduce`` makes one from the other."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TypeAlias, assert_never

from leadline.base.errors import LeadlineError
from leadline.model.anchor import Anchor, in_order

Point: TypeAlias = tuple[float, float, float]
SuggestionKey: TypeAlias = tuple[str, int, str]


@dataclass(frozen=True, slots=True)
class TrackEdit:
    """A track drawn by hand: points in stack um from the entry to the tip, in place of the traced dye. ``entry_set`` :
    the first point is the entry by the hand's word; else the brain surface says where the track begins."""

    penetration: str
    shank: int
    points_um: tuple[Point, ...]
    entry_set: bool = False

    def __post_init__(self) -> None:
        if len(self.points_um) < 2:
            raise LeadlineError(
                f"a track needs at least two points, this one has {len(self.points_um)}",
                where=f"track of {self.penetration}, shank {self.shank}",
                mend="Keep the entry and the tip",
            )


@dataclass(frozen=True, slots=True)
class Pair:
    """One place named twice: in stack um and in atlas um."""

    stack_um: Point
    atlas_um: Point


@dataclass(frozen=True, slots=True)
class Edits:
    """What is kept on disk and can be undone. ``refused`` : suggestions that the user does not want to see again."""

    anchors: tuple[Anchor, ...] = ()
    tracks: tuple[TrackEdit, ...] = ()
    refused: tuple[SuggestionKey, ...] = ()
    pairs: tuple[Pair, ...] = ()

    def anchors_of(self, penetration: str, shank: int) -> tuple[Anchor, ...]:
        """Anchors of one shank, from the surface down."""
        return in_order(a for a in self.anchors if (a.penetration, a.shank) == (penetration, shank))

    def track_of(self, penetration: str, shank: int) -> TrackEdit | None:
        """The hand-drawn track of one shank, if there is one."""
        return next((t for t in self.tracks if (t.penetration, t.shank) == (penetration, shank)), None)


@dataclass(frozen=True, slots=True)
class Selection:
    """What is in hand. ``channel`` and ``anchor`` belong to the shank; None where nothing is chosen."""

    penetration: str = ""
    shank: int = 0
    channel: int | None = None
    anchor: Anchor | None = None


@dataclass(frozen=True, slots=True)
class Session:
    """The whole of it. ``fixed`` : anchors written in brain.toml, which only that file can change."""

    edits: Edits = field(default_factory=Edits)
    selection: Selection = field(default_factory=Selection)
    fixed: tuple[Anchor, ...] = ()


@dataclass(frozen=True, slots=True)
class AddAnchor:
    """Place an anchor."""

    anchor: Anchor


@dataclass(frozen=True, slots=True)
class ChangeAnchor:
    """Move, relabel or widen an anchor."""

    old: Anchor
    new: Anchor


@dataclass(frozen=True, slots=True)
class DeleteAnchor:
    """Take an anchor away."""

    anchor: Anchor


@dataclass(frozen=True, slots=True)
class AcceptSuggestion:
    """Make a suggestion an anchor, ``source`` 'auto'."""

    anchor: Anchor


@dataclass(frozen=True, slots=True)
class RefuseSuggestion:
    """Put a suggestion away."""

    anchor: Anchor


@dataclass(frozen=True, slots=True)
class RestoreSuggestions:
    """Bring the refused suggestions of a shank back."""

    penetration: str
    shank: int


@dataclass(frozen=True, slots=True)
class DrawTrack:
    """Draw the track of a shank by hand, or redraw it."""

    edit: TrackEdit


@dataclass(frozen=True, slots=True)
class ForgetTrack:
    """Return a shank to its traced dye."""

    penetration: str
    shank: int


@dataclass(frozen=True, slots=True)
class SetPairs:
    """Replace the pairs that correct the registration."""

    pairs: tuple[Pair, ...]


@dataclass(frozen=True, slots=True)
class TakeOver:
    """Take what other programs left in the files."""

    edits: Edits


@dataclass(frozen=True, slots=True)
class SelectShank:
    """Take a shank in hand."""

    penetration: str
    shank: int


@dataclass(frozen=True, slots=True)
class SelectChannel:
    """Take a channel of the shank in hand; None lets go."""

    channel: int | None


@dataclass(frozen=True, slots=True)
class SelectAnchor:
    """Take an anchor in hand; None lets go."""

    anchor: Anchor | None


Action: TypeAlias = (
    AddAnchor | ChangeAnchor | DeleteAnchor | AcceptSuggestion | RefuseSuggestion | RestoreSuggestions | DrawTrack
    | ForgetTrack | SetPairs | TakeOver | SelectShank | SelectChannel | SelectAnchor
)  # fmt: skip


def reduce(session: Session, action: Action) -> Session:
    """The session after ``action``.

    Raises LeadlineError, and changes nothing, when anchors would cross or one of brain.toml would change.
    """
    match action:
        case SelectShank(penetration, shank):
            return replace(session, selection=Selection(penetration, shank))
        case SelectChannel(channel):
            return replace(session, selection=replace(session.selection, channel=channel))
        case SelectAnchor(anchor):
            return replace(session, selection=replace(session.selection, anchor=anchor))
        case AddAnchor() | ChangeAnchor() | DeleteAnchor() | AcceptSuggestion():
            return _reduce_anchors(session, action)
        case RefuseSuggestion(anchor):
            refused = tuple(dict.fromkeys((*session.edits.refused, key_of(anchor))))
            return _with(session, replace(session.edits, refused=refused))
        case RestoreSuggestions(penetration, shank):
            kept = tuple(key for key in session.edits.refused if key[:2] != (penetration, shank))
            return _with(session, replace(session.edits, refused=kept))
        case DrawTrack(edit):
            return _with(session, _with_track(session.edits, edit.penetration, edit.shank, edit))
        case ForgetTrack(penetration, shank):
            return _with(session, _with_track(session.edits, penetration, shank, None))
        case SetPairs(pairs):
            return _with(session, replace(session.edits, pairs=pairs))
        case TakeOver(edits):
            return _with(session, edits)
        case _:
            assert_never(action)


def key_of(anchor: Anchor) -> SuggestionKey:
    """What a suggestion is known by from run to run: its place may move a little, its landmark does not."""
    return anchor.penetration, anchor.shank, anchor.landmark


def _reduce_anchors(session: Session, action: AddAnchor | ChangeAnchor | DeleteAnchor | AcceptSuggestion) -> Session:
    anchors = session.edits.anchors
    held: Anchor | None
    match action:
        case AddAnchor(held):
            anchors = (*anchors, held)
        case AcceptSuggestion(suggested):
            held = replace(suggested, source="auto")
            anchors = (*anchors, held)
        case ChangeAnchor(old, held):
            _require_free(session, old)
            anchors = tuple(held if a == old else a for a in anchors)
        case DeleteAnchor(old):
            _require_free(session, old)
            held = None
            anchors = tuple(a for a in anchors if a != old)
    shank = held or session.selection
    in_order(a for a in anchors if (a.penetration, a.shank) == (shank.penetration, shank.shank))
    changed = _with(session, replace(session.edits, anchors=_sorted(anchors)))
    return replace(changed, selection=replace(changed.selection, anchor=held))


def _require_free(session: Session, anchor: Anchor) -> None:
    if anchor in session.fixed:
        raise LeadlineError(
            "this anchor is written in brain.toml", where=f"penetration {anchor.penetration}", mend="Change it there"
        )
    if anchor not in session.edits.anchors:
        raise LeadlineError("there is no such anchor any more", where=f"penetration {anchor.penetration}")


def _with(session: Session, edits: Edits) -> Session:
    """``session`` with new edits; an anchor that is no more is not held."""
    held = session.selection.anchor
    selection = session.selection if held in edits.anchors else replace(session.selection, anchor=None)
    return replace(session, edits=edits, selection=selection)


def _with_track(edits: Edits, penetration: str, shank: int, edit: TrackEdit | None) -> Edits:
    others = tuple(t for t in edits.tracks if (t.penetration, t.shank) != (penetration, shank))
    tracks = others if edit is None else (*others, edit)
    return replace(edits, tracks=tuple(sorted(tracks, key=lambda t: (t.penetration, t.shank))))


def _sorted(anchors: tuple[Anchor, ...]) -> tuple[Anchor, ...]:
    """The order of ``anchors.csv``."""
    return tuple(sorted(set(anchors), key=lambda a: (a.penetration, a.shank, -a.tip_distance_um)))

"""Session, history and store: no screen, no napari."""

import json
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.model.anchor import Anchor
from leadline_napari.history import REDO, UNDO, History, line_of, replay
from leadline_napari.session import (
    AcceptSuggestion,
    AddAnchor,
    ChangeAnchor,
    DeleteAnchor,
    DrawTrack,
    Edits,
    ForgetTrack,
    Pair,
    RefuseSuggestion,
    RestoreSuggestions,
    SelectAnchor,
    SelectChannel,
    SelectShank,
    Session,
    SetPairs,
    TrackEdit,
    reduce,
)

UPPER, LOWER = Anchor("A", 0, 3000.0, 900.0), Anchor("A", 0, 1000.0, 2800.0)


def after(*actions, session=None):
    session = session or Session()
    for action in actions:
        session = reduce(session, action)
    return session


def test_anchors_are_added_changed_and_taken_away_and_the_newest_is_in_hand():
    session = after(AddAnchor(LOWER), AddAnchor(UPPER))
    assert session.edits.anchors == (UPPER, LOWER)
    assert session.selection.anchor == UPPER
    moved = replace(UPPER, track_depth_um=950.0)
    session = after(ChangeAnchor(UPPER, moved), session=session)
    assert session.edits.anchors == (moved, LOWER)
    assert after(DeleteAnchor(moved), session=session).edits.anchors == (LOWER,)
    assert after(DeleteAnchor(moved), session=session).selection.anchor is None


def test_anchors_that_would_cross_are_refused_naming_both_and_nothing_changes():
    session = after(AddAnchor(UPPER))
    with pytest.raises(LeadlineError, match=r"cross: \(tip distance 3000 .* and \(tip distance 1000"):
        reduce(session, AddAnchor(replace(LOWER, track_depth_um=800.0)))
    assert session.edits.anchors == (UPPER,)


def test_anchors_of_other_shanks_may_lie_as_they_like():
    session = after(AddAnchor(UPPER), AddAnchor(replace(LOWER, shank=1, track_depth_um=10.0)))
    assert len(session.edits.anchors) == 2


def test_an_anchor_of_brain_toml_is_left_to_brain_toml():
    session = Session(Edits((UPPER,)), fixed=(UPPER,))
    for action in (DeleteAnchor(UPPER), ChangeAnchor(UPPER, LOWER)):
        with pytest.raises(LeadlineError, match=r"written in brain\.toml.*Change it there"):
            reduce(session, action)


def test_an_accepted_suggestion_says_that_it_was_one_and_a_refused_one_can_come_back():
    suggested = replace(UPPER, landmark="upper edge of the white matter")
    assert after(AcceptSuggestion(suggested)).edits.anchors == (replace(suggested, source="auto"),)
    refused = after(RefuseSuggestion(suggested), RefuseSuggestion(suggested))
    assert refused.edits.refused == (("A", 0, suggested.landmark),)
    assert after(RestoreSuggestions("A", 0), session=refused).edits.refused == ()


def test_tracks_and_pairs_are_drawn_and_forgotten():
    edit = TrackEdit("A", 1, ((0.0, 0, 0), (0, 900.0, 0)))
    session = after(DrawTrack(edit), DrawTrack(replace(edit, points_um=((1.0, 0, 0), (0, 900.0, 0)))))
    assert [t.points_um[0][0] for t in session.edits.tracks] == [1.0]
    assert after(ForgetTrack("A", 1), session=session).edits.tracks == ()
    assert after(SetPairs((Pair((0, 0, 0), (1, 1, 1)),))).edits.pairs[0].atlas_um == (1, 1, 1)
    with pytest.raises(LeadlineError, match="at least two points, this one has 1"):
        TrackEdit("A", 1, ((0.0, 0, 0),))


def test_what_is_in_hand_changes_no_edit():
    session = after(AddAnchor(UPPER), SelectShank("B", 2), SelectChannel(17))
    assert session.edits == Edits((UPPER,))
    assert (session.selection.penetration, session.selection.shank, session.selection.channel) == ("B", 2, 17)
    assert after(SelectAnchor(UPPER), session=session).selection.anchor == UPPER


names = st.text(max_size=8)
numbers = st.floats(-1e6, 1e6)
anchors = st.builds(
    Anchor,
    names,
    st.integers(0, 7),
    numbers,
    numbers,
    st.floats(1, 500),
    names,
    st.sampled_from(["user", "auto"]),
    names,
)
points = st.tuples(numbers, numbers, numbers)
tracks = st.builds(TrackEdit, names, st.integers(0, 3), st.lists(points, min_size=2, max_size=4).map(tuple))
edits = st.builds(
    Edits,
    st.lists(anchors, max_size=3).map(tuple),
    st.lists(tracks, max_size=2).map(tuple),
    st.lists(st.tuples(names, st.integers(0, 3), names), max_size=2).map(tuple),
    st.lists(st.builds(Pair, points, points), max_size=2).map(tuple),
)


@given(st.lists(st.one_of(edits, st.sampled_from([UNDO, REDO])), max_size=12))
@settings(max_examples=60, deadline=None)
def test_a_journal_tells_the_very_history_that_was_lived(steps):
    history, lines = History(Edits()), [line_of(Edits())]
    for step in steps:
        if isinstance(step, Edits):
            history, lines = history.do(step), [*lines, line_of(step)]
        else:
            history, lines = (history.undo() if step == UNDO else history.redo()), [*lines, step]
    assert replay(lines) == history


@given(st.lists(edits, min_size=1, max_size=6))
@settings(max_examples=40, deadline=None)
def test_undo_all_the_way_and_redo_all_the_way_end_where_they_began(steps):
    history = History(Edits())
    for step in steps:
        history = history.do(step)
    end = history
    for _ in steps:
        history = history.undo()
    assert history.now == Edits()
    assert history.undo() is history
    for _ in steps:
        history = history.redo()
    assert history == end


def test_a_last_line_that_a_crash_cut_short_is_left_out_but_damage_elsewhere_is_told():
    good = [line_of(Edits((UPPER,))), line_of(Edits((UPPER, LOWER)))]
    assert replay([*good, good[0][:20]]).now == Edits((UPPER, LOWER))
    with pytest.raises(json.JSONDecodeError):
        replay([good[0], good[1][:20], good[0]])

"""The section's mind on a finished tiny brain: no screen, no napari."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from tests.leadline_napari.finished import SUGGESTED

from leadline.io.brainfile import read_brain
from leadline.io.tables import anchors_text, read_anchors
from leadline.model.anchor import Anchor
from leadline.pipeline.bench import Bench
from leadline_napari.controllers.desk import Desk
from leadline_napari.controllers.resolve import stretch_words
from leadline_napari.controllers.section import SectionController
from leadline_napari.results import read_results


class Shown:
    """A view that remembers what it was shown."""

    def __init__(self):
        self.states, self.readout = [], None

    def show(self, state):
        self.states.append(state)

    def show_readout(self, readout):
        self.readout = readout

    @property
    def state(self):
        return self.states[-1]


@pytest.fixture
def section(finished, at_once):
    brain = read_brain(finished)
    told = []
    controller = SectionController(Desk(brain), Shown(), at_once, told.append)
    controller.told = told
    controller.open(Bench(brain), read_results(brain))
    return controller


def anchors(section):
    return section.desk.session.edits.anchors


def test_the_first_shank_is_laid_out_with_all_its_lanes(section):
    state = section.view.state
    assert state.shank == ("A", 0)
    assert [run.acronym for run in state.strata.runs[:5]] == ["outside", "VIP1", "VIP2/3", "VIP5", "VIP6"]
    assert state.tissue.rgb.shape[2] == 3
    assert state.ribbon.exact
    np.testing.assert_allclose(state.ribbon.share.sum(axis=1), 1.0, atol=1e-5)
    assert [lane.name for lane in state.lanes] == [
        n for n in ("lfp_power", "csd", "ripple_power_db", "unit_density_per_100um", "spike_amplitude_uv")
        if n in {lane.name for lane in section.scene.lanes}
    ]  # fmt: skip
    assert len(state.lanes) >= 3
    assert state.message == ""


def test_the_exact_answer_on_the_screen_is_the_one_in_the_channel_table(section):
    table = pd.read_parquet(section.desk.brain.out / "channels.parquet").sort_values("channel")
    contacts = section.scene.shank.contacts
    order = np.argsort(contacts.channel)
    assert (section.live.contact_region[order] == table["region_id"].to_numpy()).all()
    depth = [section.live.depth_at(float(t)) for t in contacts.tip_distance_um[order]]
    np.testing.assert_allclose(depth, table["track_depth_um"].to_numpy(float), atol=0.02)


def test_a_double_click_in_the_strata_snaps_to_the_border_and_takes_its_name(section):
    border = next(run for run in section.scene.strata.runs if run.acronym == "CCB")
    section.add_at("depth", border.top_um + 12.0)
    (anchor,) = anchors(section)
    assert anchor.track_depth_um == pytest.approx(border.top_um, abs=0.06)
    assert anchor.landmark == "VIP6 / CCB"
    assert section.view.state.in_hand.anchor == anchor
    assert read_anchors(section.desk.brain.out / "anchors.csv") == (anchor,)


def test_a_double_click_beside_a_contact_takes_the_nearest_row_and_its_present_depth(section):
    before = section.live.depth_at(700.0)
    section.add_at("tip", 712.0)
    (anchor,) = anchors(section)
    assert anchor.tip_distance_um == 700.0
    assert anchor.track_depth_um == pytest.approx(before, abs=0.06)


def test_while_an_anchor_is_dragged_regions_follow_and_nothing_is_saved_until_it_is_dropped(section, at_once):
    section.add_at("tip", 700.0)
    (start,) = anchors(section)
    at_once.hold = True
    before, followed = section.view.state.sites.rgb.copy(), []
    for step in (30.0, 90.0, 150.0):
        section.drag_to(start, "depth", start.track_depth_um + step)
        state = section.view.state
        assert not state.ribbon.exact
        followed.append(section.live.depth_at(700.0) - start.track_depth_um)
    assert (section.view.state.sites.rgb != before).any()
    assert 0.0 < followed[0] < followed[1] < followed[2] < 150.0  # as far as the anchor is surer than the draws
    assert anchors(section) == (start,)
    section.drop()
    assert anchors(section)[0].track_depth_um == pytest.approx(start.track_depth_um + 150.0, abs=0.1)
    assert not section.view.state.ribbon.exact
    at_once.go_on()
    assert section.view.state.ribbon.exact


def test_parts_that_did_not_change_stay_the_same_objects_in_a_drag(section, at_once):
    section.add_at("tip", 700.0)
    at_once.hold = True
    first = section.view.state
    section.drag_to(anchors(section)[0], "tip", 800.0)
    second = section.view.state
    assert second.tissue is first.tissue
    assert second.strata is first.strata
    assert all(a is b for a, b in zip(first.lanes, second.lanes, strict=True))
    assert second.band is not first.band


def test_a_dragged_anchor_stops_at_its_neighbours_instead_of_crossing_them(section):
    section.add_at("tip", 1200.0)
    section.add_at("tip", 600.0)
    upper, lower = anchors(section)
    section.drag_to(lower, "depth", upper.track_depth_um - 500.0)
    section.drop()
    assert anchors(section)[1].track_depth_um == pytest.approx(upper.track_depth_um + 1.0)
    section.drag_to(anchors(section)[1], "tip", 5000.0)
    section.drop()
    assert anchors(section)[1].tip_distance_um == pytest.approx(1199.0)
    assert section.told == []


def test_a_stale_answer_is_not_shown(section, at_once):
    section.add_at("tip", 700.0)
    at_once.hold = True
    section.nudge("depth", 5.0)
    stale = at_once.kept[-1]
    section.undo()
    section.undo()
    assert anchors(section) == ()
    at_once.go_on()
    assert section.answers.base.anchors == ()
    assert stale[0] == "answer"


def test_nudges_move_by_what_they_say_and_each_is_one_step_of_undo(section):
    section.add_at("tip", 700.0)
    start = anchors(section)[0]
    section.nudge("depth", 5.0)
    section.nudge("depth", -1.0)
    section.nudge("tip", 1.0)
    moved = anchors(section)[0]
    assert moved.track_depth_um == pytest.approx(start.track_depth_um + 4.0)
    assert moved.tip_distance_um == pytest.approx(start.tip_distance_um + 1.0)
    for _ in range(3):
        section.undo()
    assert anchors(section) == (start,)


def test_a_suggestion_is_shown_with_its_evidence_and_accepted_or_refused(section):
    (tie,) = [t for t in section.view.state.band.ties if t.kind == "suggested"]
    section.choose(tie.anchor)
    held = section.view.state.in_hand
    assert held.kind == "suggested"
    assert held.evidence == "For: gamma power falls by 6 dB here\nAgainst: unit density does not change"
    section.accept()
    assert anchors(section) == (replace(SUGGESTED, source="auto"),)
    assert [t.kind for t in section.view.state.band.ties] == ["auto"]
    section.undo()
    section.choose(tie.anchor)
    section.delete()
    assert section.view.state.band.ties == ()
    section.restore_suggestions()
    assert [t.kind for t in section.view.state.band.ties] == ["suggested"]


def test_a_stretch_that_tissue_seldom_shows_is_told(section):
    section.add_at("tip", 1200.0)
    section.add_at("tip", 600.0)
    lower = anchors(section)[1]
    section.drag_to(lower, "depth", lower.track_depth_um + 250.0)
    assert "tissue seldom goes beyond 0.8-1.25" in section.view.state.band.out_of_range
    assert stretch_words(np.array([0.0, 100.0, 200.0]), np.array([1.0, 1.2])) == ""
    assert stretch_words(np.array([0.0, 100.0, 200.0]), np.array([0.5, 1.2])).startswith("Stretch 0.50 at 0-100 um")


def test_the_cursor_reads_region_layer_probability_and_values(section):
    section.hover("tip", 1105.0)
    words = section.view.readout.text
    assert "channel 20 · 1100 um from tip" in words
    assert "layer" in words
    assert "p 0." in words
    assert "Ripple power" in words
    section.hover("depth", None)
    assert section.view.readout is None


def test_a_second_reader_is_shown_beside_and_cannot_be_moved(section, tmp_path):
    other = Anchor("A", 0, 900.0, 850.0, note="theirs")
    (tmp_path / "other.csv").write_text(anchors_text([other]))
    section.show_second(tmp_path / "other.csv")
    assert [t.label for t in section.view.state.band.ties if t.kind == "second"] == ["theirs"]
    section.drag_to(other, "depth", 1000.0)
    section.drop()
    assert anchors(section) == ()
    section.show_second(None)
    assert "second" not in {t.kind for t in section.view.state.band.ties}


def test_lanes_are_chosen_ordered_and_ranged(section):
    section.show_lanes(("unit_density_per_100um", "lfp_power"))
    assert [lane.name for lane in section.view.state.lanes] == ["unit_density_per_100um", "lfp_power"]
    before = section.view.state.lanes[1]
    section.set_range("lfp_power", 20.0, 80.0)
    after = section.view.state.lanes[1]
    assert (after.low, after.high) != (before.low, before.high)
    assert (after.rgba != before.rgba).any()


def test_going_from_anchor_to_anchor_by_key_visits_suggestions_too_from_the_surface_down(section):
    section.add_at("tip", 1300.0)
    section.choose(None)
    seen = []
    for _ in range(3):
        section.step(1)
        seen.append(section.desk.session.selection.anchor)
    assert seen == [anchors(section)[0], SUGGESTED, anchors(section)[0]]


def test_anchors_of_brain_toml_stay_and_are_told_to_be_changed_there(finished, at_once):
    file = finished / "brain.toml"
    file.write_text(
        file.read_text() + '\n[[anchor]]\npenetration = "A"\ntip_distance_um = 1000.0\ntrack_depth_um = 700.0\n'
    )
    brain = read_brain(finished)
    told = []
    section = SectionController(Desk(brain), Shown(), at_once, told.append)
    section.open(Bench(brain), read_results(brain))
    (tie,) = [t for t in section.view.state.band.ties if t.kind == "fixed"]
    section.choose(tie.anchor)
    section.delete()
    assert "Change it there" in told[0]
    assert len(anchors(section)) == 1

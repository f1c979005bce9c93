"""Canvas, runs, table and corrections without a screen."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.io.points import read_track_edits
from leadline.model.frames import ALL_CODES, direction
from leadline.model.settings import Settings
from leadline.pipeline.bench import Bench
from leadline.pipeline.standing import Standing
from leadline_napari.controllers import canvas
from leadline_napari.controllers.corrections import CorrectionController, handles_of, ordered
from leadline_napari.controllers.desk import Desk
from leadline_napari.controllers.runs import RunController, save_settings, settings_of, stage_states, with_settings
from leadline_napari.controllers.table import table_of
from leadline_napari.results import read_results
from leadline_napari.session import Selection, SelectShank


@pytest.fixture
def brain(finished):
    return read_brain(finished)


def test_every_orientation_is_turned_to_coronal_sections_with_dorsal_up():
    for code in ALL_CODES:
        pose = canvas.pose_of(code)
        assert code[pose.order[0]] in "AP"
        assert (code[pose.order[1]], pose.flat[1]) in (("S", "up"), ("I", "down"))
        assert (code[pose.order[2]], pose.flat[2]) in (("R", "right"), ("L", "left"))


SCREEN = {"away": (0, 1), "towards": (0, -1), "up": (1, 1), "down": (1, -1), "right": (2, 1), "left": (2, -1)}


def test_no_orientation_is_shown_as_its_mirror_image():
    """Stored axes laid out on the screen as (away, up, right) must have the handedness of (A, S, R): both triples are
    seen from behind the animal."""
    for code in ALL_CODES:
        anatomy = np.linalg.det([direction(letter) for letter in code]) / np.linalg.det(
            [direction(letter) for letter in "ASR"]
        )
        pose = canvas.pose_of(code)
        for order, way in ((pose.order, pose.flat), ((0, 1, 2), pose.solid)):
            laid = np.zeros((3, 3))
            for axis, word in zip(order, way, strict=True):
                row, sign = SCREEN[word]
                laid[axis, row] = sign
            assert np.linalg.det(laid) == pytest.approx(anatomy), (code, order)


def test_in_3d_the_brain_is_looked_at_from_behind_with_dorsal_up():
    for code in ALL_CODES:
        pose = canvas.pose_of(code)
        to_atlas = np.array([direction(letter) for letter in code]).T
        ap, dv, ml = to_atlas @ np.array(pose.view)
        assert ap < 0 < dv  # towards the front and downwards
        assert ml > 0
        np.testing.assert_allclose(to_atlas @ np.array(pose.up), direction("S"))


def test_regions_in_stack_space_are_those_that_the_registration_says(brain):
    bench, results = Bench(brain), read_results(brain)
    finest = bench.background.finest
    regions = canvas.AtlasInStack(finest, bench.atlas, results.registration, 50.0)
    assert regions.shape == finest.shape
    plane = regions[:, 40, :]
    assert plane.shape == (finest.shape[0], finest.shape[2])
    rng = np.random.default_rng(1)
    for a, c in rng.integers(0, (finest.shape[0], finest.shape[2]), (50, 2)):
        point = finest.points(np.array([[a, 40, c]], float))
        expected = bench.atlas.label_at(results.registration.stack_to_atlas(point))[0]
        assert regions.ids[plane[a, c]] == expected
    assert (regions[3:9, 20:24, 5] == regions[:, 20:24, 5][3:9]).all()


def test_contacts_lie_on_their_track_and_carry_their_whole_row(brain):
    bench, results = Bench(brain), read_results(brain)
    code = bench.background.finest.code
    spec = canvas.contact_spec(results.channels, results.tracks, bench.atlas.structures, code)
    table = spec.options["features"]
    assert list(table.columns) == list(results.channels.columns)
    back = results.registration.stack_to_atlas(spec.data)
    np.testing.assert_allclose(back, table[["ap_um", "dv_um", "ml_um"]].to_numpy(float), atol=1.0)


def test_surfaces_enclose_what_they_are_named_after(brain):
    bench, results = Bench(brain), read_results(brain)
    specs = canvas.surface_specs(bench.atlas, results.registration, results, bench.background.finest.code)
    names = [s.name for s in specs]
    assert names[0] == "Brain hull"
    assert {"CCB surface", "VIP5 surface"} <= set(names)
    inside = results.registration.atlas_to_stack(np.argwhere(bench.atlas.labels.array() > 0) * bench.atlas.voxel_um)
    points = specs[0].data[0]
    assert (points.min(axis=0) < inside.min(axis=0) + 150).all()
    assert (points.max(axis=0) > inside.max(axis=0) - 150).all()


def test_a_stage_is_as_far_as_its_least_finished_step():
    steps = (
        Standing("register", "register", "done", ("a note",)),
        Standing("profile A", "profile", "done"),
        Standing("profile B", "profile", "missing"),
        Standing("anchor", "anchor", "changed"),
    )
    found = {s.name: (s.state, s.note) for s in stage_states(steps)}
    assert found == {"register": ("done", "a note"), "profile": ("missing", ""), "anchor": ("changed", "")}


def test_settings_go_into_brain_toml_and_every_other_line_stays(brain):
    before = brain.file.read_text()
    changed = save_settings(brain, {"trace": {"sensitivity": 1.5}, "profile": {"ripple_hz": (120.0, 200.0)}})
    assert changed.settings.trace.sensitivity == 1.5
    assert changed.settings.profile.ripple_hz == (120.0, 200.0)
    assert brain.file.read_text().startswith(before.rstrip())
    again = save_settings(changed, {"trace": {"sensitivity": None}, "profile": {"ripple_hz": None}})
    assert again.settings == Settings()
    assert settings_of(again)["trace"]["sensitivity"] == 1.0


def test_a_setting_that_does_not_fit_leaves_the_file_as_it_was(brain):
    before = brain.file.read_text()
    with pytest.raises(LeadlineError, match="ripple_hz"):
        save_settings(brain, {"profile": {"ripple_hz": (200.0, 100.0)}})
    assert brain.file.read_text() == before


def test_a_setting_is_changed_where_its_table_stands():
    text = "[settings.trace]\nsensitivity = 1.0\nmin_length_um = 900.0\n\n[brain]\nname = 'x'\n"
    changed = with_settings(text, {"trace": {"sensitivity": 2.0}})
    assert changed == "[settings.trace]\nmin_length_um = 900.0\nsensitivity = 2.0\n\n[brain]\nname = 'x'\n"


class Kept:
    def __init__(self):
        self.states = []

    def show_state(self, state):
        self.states.append(state)


def test_a_run_that_fails_is_told_in_words_and_leaves_the_buttons_free(brain, at_once):
    (brain.folder / "a_lfp.bin").unlink()
    view, ended = Kept(), []
    runs = RunController(Desk(brain), view, at_once, lambda: ended.append(True))
    runs.open(read_results(brain))
    runs.start("locate", None)
    assert ended == [True]
    assert runs.running == ""
    runs._show()
    assert "a_lfp.bin" in " ".join(view.states[-1].messages)
    assert view.states[-1].penetrations[0].suggestions == 1


def test_the_table_shows_plain_values_with_missing_ones_empty(brain):
    bench, results = Bench(brain), read_results(brain)
    table = results.channels.copy()
    table.loc[3, ["track_depth_um", "region_id"]] = pd.NA
    state = table_of(table, bench.atlas.structures, Selection("A", 0, channel=5))
    assert state.columns[:4] == ("penetration", "shank", "channel", "region")
    assert state.rows[3][state.columns.index("track_depth_um")] is None
    assert state.chosen == ("A", 5)
    assert len(state.rows) == len(state.colours) == 32


def corrections(brain, at_once):
    told, redrawn, moved = [], [], []
    controller = CorrectionController(
        Desk(brain), Kept(), at_once, told.append, redrawn.append, lambda p: moved.append(p), lambda: None
    )
    controller.open(Bench(brain), read_results(brain))
    controller.desk.act(SelectShank("A", 0))
    return controller, told, redrawn, moved


def test_points_added_in_any_order_are_put_in_order_along_the_track():
    line = np.column_stack([np.zeros(6), np.linspace(0, 1000, 6), np.linspace(0, 100, 6)])
    mixed = line[[0, 1, 2, 4, 5, 3]]
    np.testing.assert_allclose(ordered(mixed), line)


def test_a_track_drawn_by_hand_is_saved_refitted_and_forgotten(brain, at_once):
    controller, told, redrawn, _ = corrections(brain, at_once)
    points = controller.begin()
    assert len(points) == 8
    points[4] += [0.0, 50.0, 0.0]
    controller.draw(points)
    assert brain.track_edits.is_file()
    assert redrawn[-1].source == "points"
    assert redrawn[-1].length_um == pytest.approx(handles_length(points), rel=0.15)
    controller.forget()
    assert not brain.track_edits.exists()
    assert told == []


def test_an_entry_set_by_hand_is_where_the_track_begins_until_its_point_is_taken_away(brain, at_once):
    controller, told, redrawn, _ = corrections(brain, at_once)
    points = controller.begin()
    inside = points[0] + 0.22 * (points[-1] - points[0])
    controller.set_end("entry", inside)
    (edit,) = controller.desk.session.edits.tracks
    assert edit.entry_set
    assert len(edit.points_um) == 7  # the point above it is left out
    np.testing.assert_allclose(redrawn[-1].stack_um[0], inside, atol=5.0)
    assert read_track_edits(brain.track_edits)["A", 0].entry_set
    moved = np.array(edit.points_um)
    moved[3] += [0.0, 30.0, 0.0]
    controller.draw(moved)
    assert controller.desk.session.edits.tracks[0].entry_set
    assert Desk(brain).session.edits.tracks[0].entry_set  # after a restart
    controller.draw(moved[1:])
    assert not controller.desk.session.edits.tracks[0].entry_set
    assert np.linalg.norm(redrawn[-1].stack_um[0] - inside) > 200.0  # at the brain's surface again
    assert told == []


def test_a_track_that_the_dye_does_not_show_can_be_drawn_from_nothing(brain, at_once):
    found = read_results(brain)
    told, redrawn = [], []
    controller = CorrectionController(
        Desk(brain), Kept(), at_once, told.append, redrawn.append, lambda p: None, lambda: None
    )
    controller.open(Bench(brain), replace(found, tracks={}))
    controller.desk.act(SelectShank("A", 0))
    assert controller.begin().shape == (0, 3)
    line = found.tracks["A", 0].stack_um
    controller.draw(line[:1])
    assert redrawn == []
    controller.draw(line[[0, -1]])
    assert redrawn[-1].length_um == pytest.approx(found.tracks["A", 0].length_um, abs=200.0)
    assert told == []


def handles_length(points):
    return float(np.linalg.norm(np.diff(points, axis=0), axis=1).sum())


def test_handles_are_spread_from_entry_to_end(brain):
    track = read_results(brain).tracks["A", 0]
    handles = handles_of(track)
    np.testing.assert_allclose(handles[[0, -1]], track.stack_um[[0, -1]], atol=1e-6)


def test_pairs_being_set_survive_a_restart_and_count_only_when_accepted(brain, at_once):
    controller, told, _, _ = corrections(brain, at_once)
    place = np.array([2500.0, 3000.0, 2500.0])
    falls = controller.results.registration.stack_to_atlas(place[None])[0]
    controller.add_pair(place, falls + np.array([80.0, 0.0, 0.0]))
    assert "80 um before" in controller.errors
    again, *_ = corrections(brain, at_once)
    assert again.draft == controller.draft
    assert again.desk.session.edits.pairs == ()
    again.accept_pairs()
    assert again.desk.session.edits.pairs == again.draft
    moved = again.preview().stack_to_atlas(place[None])[0]
    assert np.linalg.norm(moved - falls - [80.0, 0.0, 0.0]) < 10.0
    again.delete_pair(0)
    again.withdraw_pairs()
    assert told == []


def test_drawing_without_a_track_in_hand_changes_nothing(brain, at_once):
    controller, *_ = corrections(brain, at_once)
    controller.draw(np.zeros((3, 3)))
    controller.snap()
    assert controller.desk.session.edits.tracks == ()

"""The docks in a real viewer, worked with real mouse and key events."""

# ruff: noqa: E402 - what needs napari is imported only where there is one

import time
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

napari = pytest.importorskip("napari")
pytest.importorskip("pyqtgraph")

from qtpy.QtCore import QPoint, Qt
from qtpy.QtGui import QImage
from qtpy.QtTest import QTest
from qtpy.QtWidgets import QAbstractButton, QAbstractItemView, QApplication, QComboBox, QDoubleSpinBox, QLineEdit
from tests.good_brain import write_good_brain
from tests.leadline_napari.screen.hands import anchors, click, double_click, drag, opened, place, settle, tie_end

from leadline.io.tables import read_anchors
from leadline_napari.docks import close_workbench, workbench
from leadline_napari.session import AddAnchor
from leadline_napari.style import DARK, LIGHT
from leadline_napari.views.work import QtProgress


@pytest.fixture(scope="module")
def window():
    """One viewer for all tests here: each opens a fresh brain in it, as a person does."""
    viewer = napari.Viewer(show=True)
    viewer.window._qt_window.resize(1280, 800)
    found = workbench(viewer)
    found.show_docks()
    yield found
    close_workbench(viewer)
    viewer.close()


@pytest.fixture
def bench(window, qtbot):
    """The window, with what it says to the user kept in ``told``."""
    window.told = []
    window.failed.connect(window.told.append)
    window.docks["section"].raise_()
    yield window
    window.failed.disconnect(window.told.append)
    settle(window, qtbot)
    if window.viewer.dims.ndisplay == 3:
        window.viewer.dims.ndisplay = 2


def test_a_brain_opens_with_every_layer_in_um_and_the_canvas_is_not_blank(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    names = [layer.name for layer in bench.viewer.layers]
    assert names == ["Stack background", "Stack dye", "Atlas regions", "Tracks", "Contacts"]
    assert all({str(u) for u in layer.units} == {"micrometer"} for layer in bench.viewer.layers)
    picture = bench.viewer.screenshot(canvas_only=True, flash=False)
    assert (picture[..., :3].max(axis=2) > 60).mean() > 0.02
    features = bench.viewer.layers["Contacts"].features
    table = pd.read_parquet(finished / "out" / "channels.parquet")
    assert list(features["region"]) == list(table["region"])
    assert bench.told == []


def test_anchors_are_added_dragged_nudged_undone_and_deleted_with_mouse_and_keys(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    ccb = next(run for run in bench.sections.scene.strata.runs if run.acronym == "CCB")
    double_click(bench, "strata", 0.5, ccb.top_um + 8.0)
    double_click(bench, "lane", 0.5, bench.section.log.end_um - 400.0)
    settle(bench, qtbot)
    assert [a.landmark for a in anchors(bench)] == ["VIP6 / CCB", ""]
    assert anchors(bench)[1].tip_distance_um == 400.0
    start = anchors(bench)[1]
    goal = place(bench, "band", 0.0, start.track_depth_um + 80.0) + QPoint(6, 0)
    drag(bench, tie_end(bench, start, "depth"), goal)
    moved = anchors(bench)[1]
    assert moved.track_depth_um == pytest.approx(start.track_depth_um + 80.0, abs=5.0)
    assert read_anchors(finished / "out" / "anchors.csv") == anchors(bench)
    log = bench.section.log
    log.setFocus()
    QTest.keyClick(log, Qt.Key.Key_Down)
    QTest.keyClick(log, Qt.Key.Key_Up, Qt.KeyboardModifier.ShiftModifier)
    assert anchors(bench)[1].track_depth_um == pytest.approx(moved.track_depth_um + 4.0)
    for _ in range(3):
        QTest.keyClick(log, Qt.Key.Key_Z, Qt.KeyboardModifier.ControlModifier)
    assert anchors(bench)[1] == start
    QTest.keyClick(log, Qt.Key.Key_Z, Qt.KeyboardModifier.ControlModifier | Qt.KeyboardModifier.ShiftModifier)
    assert anchors(bench)[1] == moved
    drag(bench, tie_end(bench, moved, "tip"), place(bench, "band", 1.0, log.end_um - 500.0) - QPoint(6, 0))
    assert anchors(bench)[1].tip_distance_um == 500.0
    QTest.keyClick(log, Qt.Key.Key_Delete)
    settle(bench, qtbot)
    assert len(anchors(bench)) == 1
    assert bench.told == []


def test_a_suggestion_is_taken_in_hand_by_a_click_and_accepted_with_enter(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    (tie,) = bench.section._state.band.ties
    log = bench.section.log
    click(bench, tie_end(bench, tie.anchor, "depth"))
    assert "gamma power falls" in bench.section.readout.text()
    QTest.keyClick(log, Qt.Key.Key_Return)
    settle(bench, qtbot)
    assert [a.source for a in anchors(bench)] == ["auto"]


def test_a_channel_chosen_anywhere_is_chosen_everywhere(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    log = bench.section.log
    click(bench, place(bench, "lane", 0.5, log.end_um - 900.0))
    channel = bench.desk.session.selection.channel
    contacts = bench.sections.scene.shank.contacts
    assert contacts.tip_distance_um[list(contacts.channel).index(channel)] == 900.0
    assert bench.section._state.sites.chosen == channel
    rows = bench.viewer.layers["Contacts"].selected_data
    assert list(bench.viewer.layers["Contacts"].features["channel"].iloc[list(rows)]) == [channel]
    index = bench.table.table.selectionModel().selectedRows()[0]
    columns = bench.table.model.state.columns
    assert bench.table.filter.index(index.row(), columns.index("channel")).data() == str(channel)
    bench._contact_picked(3)
    assert bench.desk.session.selection.channel == bench.viewer.layers["Contacts"].features["channel"].iloc[3]


def test_the_table_is_filtered_sorted_by_value_and_copied(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    table = bench.table
    QTest.keyClicks(table.words, "ccb between")
    assert table.filter.rowCount() == 0
    table.words.setText("ccb")
    regions = [table.filter.index(r, 3).data() for r in range(table.filter.rowCount())]
    assert set(regions) == {"CCB"}
    table.words.clear()
    column = table.model.state.columns.index("tip_distance_um")
    table.table.sortByColumn(column, Qt.SortOrder.DescendingOrder)
    values = [float(table.filter.index(r, column).data()) for r in range(table.filter.rowCount())]
    assert values == sorted(values, reverse=True)
    table.copy()
    lines = QApplication.clipboard().text().splitlines()
    assert len(lines) == 33
    assert lines[0].startswith("penetration\tshank\tchannel\tregion")


def test_a_track_is_redrawn_by_hand_and_snapped_to_the_dye(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    bench.corrections.edit_button.click()
    layer = bench.viewer.layers["Track points"]
    before, end = layer.data.copy(), bench.sections.scene.end_um
    points = before.copy()
    points[3] += [0.0, 40.0, 60.0]
    layer.data = points
    settle(bench, qtbot)
    assert (finished / "track_edits.csv").is_file()
    assert abs(bench.sections.scene.end_um - end) > 0.1
    bench.corrections.snap_button.click()
    settle(bench, qtbot)
    assert np.linalg.norm(layer.data[3] - before[3]) < 20.0
    QTest.keyClick(bench.section.log, Qt.Key.Key_Z, Qt.KeyboardModifier.ControlModifier)
    settle(bench, qtbot)
    assert np.abs(layer.data - points).max() < 0.02
    layer.selected_data = {2}
    layer.remove_selected()
    settle(bench, qtbot)
    assert len(bench.desk.session.edits.tracks[0].points_um) == 7
    bench.editing._set("end", layer.data[-1] + [0.0, 0.0, 10.0])
    settle(bench, qtbot)
    assert bench.desk.session.edits.tracks[0].points_um[-1][2] == pytest.approx(layer.data[-1][2], abs=0.01)
    bench.corrections.forget_button.click()
    settle(bench, qtbot)
    assert not (finished / "track_edits.csv").exists()
    assert bench.told == []


def test_pairs_refine_the_registration_only_once_they_are_accepted(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    bench.editing._set("pair", np.array([2500.0, 3000.0, 2500.0]))
    bench.editing._set("pair", np.array([2500.0, 3600.0, 2900.0]))
    ring = bench.viewer.layers["Pairs: place in the atlas"]
    ring.data = ring.data + np.array([60.0, 0.0, 0.0])
    ring.events.data(value=ring.data, action="changed", data_indices=(0, 1), vertex_indices=((),))
    settle(bench, qtbot)
    assert "60 um before" in bench.corrections.errors.text()
    assert not (finished / "registration_pairs.csv").exists()
    bench.corrections.preview_button.click()
    bench.corrections.accept_button.click()
    assert (finished / "registration_pairs.csv").is_file()
    bench.corrections.withdraw_button.click()
    assert not (finished / "registration_pairs.csv").exists()
    assert bench.told == []


def test_surfaces_and_the_plane_along_the_track_are_shown_in_3d(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    bench.brain.surfaces_button.click()
    settle(bench, qtbot)
    assert bench.viewer.dims.ndisplay == 3
    shown = [layer.name for layer in bench.viewer.layers if layer.visible]
    assert "Brain hull" in shown
    assert "CCB surface" in shown
    assert shown[-2:] == ["Tracks", "Contacts"]
    assert all({str(u) for u in layer.units} == {"micrometer"} for layer in bench.viewer.layers)
    bench.brain.plane_button.click()
    settle(bench, qtbot)
    image = bench.viewer.layers["Plane along track"]
    track = bench.sections.scene.shank.track
    order = list(bench.viewer.dims.order)
    normal = np.empty(3)
    normal[order] = np.array(image.plane.normal)
    normal /= np.array(image.scale)
    way = track.stack_um[-1] - track.stack_um[0]
    assert abs(normal @ way) < 1e-3 * np.linalg.norm(normal) * np.linalg.norm(way)


@pytest.mark.parametrize("suffix", [".png", ".svg", ".pdf"])
def test_the_section_is_saved_as_a_figure(bench, qtbot, finished, tmp_path, suffix):
    from leadline_napari.views.figures import save_view

    opened(bench, qtbot, finished)
    file = tmp_path / f"section{suffix}"
    save_view(bench.section.log, file)
    if suffix == ".png":
        image = QImage(str(file))
        assert image.width() > 2.5 * bench.section.log.width()
        colours = {image.pixel(x, y) for x in range(0, image.width(), 7) for y in range(0, image.height(), 7)}
        assert len(colours) > 50
    elif suffix == ".svg":
        text = file.read_text()
        assert "VIP2/3" in text
        assert text.count("<rect") + text.count("<path") > 50
    else:
        assert file.read_bytes()[:5] == b"%PDF-"
        assert file.stat().st_size > 10_000


def test_appearance_follows_the_viewer(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    bench.viewer.theme = "light"
    assert bench.section.theme is LIGHT
    assert bench.section.log.band.theme is LIGHT
    assert bench.section.log.band.band is bench.section._state.band
    bench.viewer.theme = "dark"
    assert bench.section.theme is DARK


def test_every_control_has_a_tool_tip_and_can_be_reached_by_key(bench):
    kinds = (QAbstractButton, QComboBox, QDoubleSpinBox)
    for view in (bench.brain, bench.section, bench.table, bench.corrections):
        for control in (w for kind in kinds for w in view.findChildren(kind)):
            inner = isinstance(control.parent(), QComboBox | QLineEdit | QDoubleSpinBox | QAbstractItemView)
            if inner or control.objectName().startswith("qt_"):
                continue
            assert control.toolTip(), (view.objectName(), control.metaObject().className(), control.property("text"))
            assert control.focusPolicy() & Qt.FocusPolicy.TabFocus, (view.objectName(), control.property("text"))


def test_errors_are_told_in_words_and_the_window_goes_on(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    double_click(bench, "strata", 0.5, 700.0)
    (anchor,) = anchors(bench)
    bench.sections._act(AddAnchor(replace(anchor, tip_distance_um=anchor.tip_distance_um + 100.0)))
    settle(bench, qtbot)
    assert any("anchors cross" in words for words in bench.told)
    assert len(anchors(bench)) == 1
    assert bench.brain.messages.count() >= 1


def test_napari_itself_opens_a_brain_folder_and_offers_the_docks(bench, qtbot, finished):
    with qtbot.waitSignal(bench.opened, timeout=120_000):
        bench.viewer.open(str(finished), plugin="leadline")
    settle(bench, qtbot)
    assert bench.desk.brain.folder == finished
    assert "Contacts" in bench.viewer.layers
    _, widget = bench.viewer.window.add_plugin_dock_widget("leadline", "Section")
    assert widget is bench.section
    assert bench.told == []


def test_long_work_is_shown_in_the_activity_dock_and_cancelled_from_there(bench, qtbot, finished):
    from napari.utils.progress import progress

    opened(bench, qtbot, finished)
    seen = []

    def work():
        bench.progress.begin("a long piece of work", 100)
        for _ in range(2000):
            bench.progress.step(0.05)
            time.sleep(0.005)
        return "never"

    bench.progress = QtProgress(bench)
    bench.runner.submit("run", work, seen.append, seen.append)
    qtbot.waitUntil(lambda: any(p.desc.startswith("a long") for p in progress._all_instances), timeout=10_000)
    (bar,) = [p for p in progress._all_instances if p.desc.startswith("a long")]
    qtbot.waitUntil(lambda: bar.n > 0, timeout=10_000)
    bar.cancel()
    qtbot.waitUntil(lambda: bool(seen), timeout=10_000)
    assert seen == [""]
    bench.progress.finish()
    bench.progress = None
    assert not [p for p in progress._all_instances if p.desc.startswith("a long")]


def test_the_demo_brain_is_written_off_the_screen_and_opened(bench, qtbot, monkeypatch):
    monkeypatch.setattr("leadline.demo.write.write_brain", lambda folder, *_: write_good_brain(folder))
    with qtbot.waitSignal(bench.opened, timeout=120_000):
        bench.viewer.open_sample("leadline", "demo")
    settle(bench, qtbot)
    assert bench.desk.brain.name == "tiny-01"
    assert [layer.name for layer in bench.viewer.layers] == ["Stack background", "Stack dye"]
    assert "run 'Trace'" in bench.section.banner.text()
    assert bench.told == []

"""The docks in a real viewer, worked with real mouse and key events."""

# ruff: noqa: E402 - what needs napari is imported only where there is one

from dataclasses import replace

import pytest

napari = pytest.importorskip("napari")
pytest.importorskip("pyqtgraph")

from qtpy.QtCore import QPoint, Qt
from qtpy.QtGui import QImage
from qtpy.QtTest import QTest
from qtpy.QtWidgets import (
    QAbstractButton,
    QAbstractItemView,
    QAbstractSpinBox,
    QApplication,
    QComboBox,
    QDialogButtonBox,
    QHeaderView,
    QLineEdit,
    QPlainTextEdit,
)
from tests.leadline_napari.screen.hands import (
    LEFT,
    NONE,
    anchors,
    click,
    double_click,
    drag,
    opened,
    place,
    settle,
    tie_end,
)

from leadline.io.tables import read_anchors
from leadline_napari.session import AddAnchor
from leadline_napari.style import DARK, LIGHT


def test_anchors_are_added_dragged_nudged_undone_and_deleted_with_mouse_and_keys(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    ccb = next(run for run in bench.section.controller.scene.strata.runs if run.acronym == "CCB")
    double_click(bench, "strata", 0.5, ccb.top_um + 8.0)
    double_click(bench, "lane", 0.5, bench.section.view.log.end_um - 400.0)
    settle(bench, qtbot)
    assert [a.landmark for a in anchors(bench)] == ["VIP6 / CCB", ""]
    assert anchors(bench)[1].tip_distance_um == 400.0
    start = anchors(bench)[1]
    goal = place(bench, "band", 0.0, start.track_depth_um + 80.0) + QPoint(6, 0)
    drag(bench, tie_end(bench, start, "depth"), goal)
    moved = anchors(bench)[1]
    assert moved.track_depth_um == pytest.approx(start.track_depth_um + 80.0, abs=5.0)
    assert read_anchors(finished / "out" / "anchors.csv") == anchors(bench)
    log = bench.section.view.log
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
    (tie,) = bench.section.view._state.band.ties
    log = bench.section.view.log
    click(bench, tie_end(bench, tie.anchor, "depth"))
    assert "gamma power falls" in bench.section.view.readout.toPlainText()
    QTest.keyClick(log, Qt.Key.Key_Return)
    settle(bench, qtbot)
    assert [a.source for a in anchors(bench)] == ["auto"]


def test_a_channel_chosen_anywhere_is_chosen_everywhere(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    log = bench.section.view.log
    click(bench, place(bench, "lane", 0.5, log.end_um - 900.0))
    channel = bench.desk.session.selection.channel
    contacts = bench.section.controller.scene.shank.contacts
    assert contacts.tip_distance_um[list(contacts.channel).index(channel)] == 900.0
    assert bench.section.view._state.sites.chosen == channel
    rows = bench.viewer.layers["Contacts"].selected_data
    assert list(bench.viewer.layers["Contacts"].features["channel"].iloc[list(rows)]) == [channel]
    index = bench.table.view.table.selectionModel().selectedRows()[0]
    columns = bench.table.view.model.state.columns
    assert bench.table.view.filter.index(index.row(), columns.index("channel")).data() == str(channel)
    bench.layers._picked(3)
    assert bench.desk.session.selection.channel == bench.viewer.layers["Contacts"].features["channel"].iloc[3]


def test_the_table_is_filtered_sorted_by_value_and_copied(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    table = bench.table.view
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


@pytest.mark.parametrize("suffix", [".png", ".svg", ".pdf"])
def test_the_section_is_saved_as_a_figure(bench, qtbot, finished, tmp_path, suffix):
    from leadline_napari.views.figures import save_view

    opened(bench, qtbot, finished)
    file = tmp_path / f"section{suffix}"
    save_view(bench.section.view.log, file)
    if suffix == ".png":
        image = QImage(str(file))
        assert image.width() > 2.5 * bench.section.view.log.width()
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
    assert bench.section.view.theme is LIGHT
    assert bench.section.view.log.band.theme is LIGHT
    assert bench.section.view.log.band.band is bench.section.view._state.band
    bench.viewer.theme = "dark"
    assert bench.section.view.theme is DARK


def test_every_control_has_a_tool_tip_and_can_be_reached_by_key(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    dialogs = [bench.section.choose_lanes(), bench.brain.choose_settings()]
    kinds = (QAbstractButton, QAbstractItemView, QComboBox, QAbstractSpinBox, QLineEdit, QPlainTextEdit)
    views = [bench.brain.view, bench.section.view, bench.table.view, bench.corrections.view]
    seen = 0
    for view in (*views, *dialogs):
        for control in (w for kind in kinds for w in view.findChildren(kind)):
            inner = isinstance(control.parent(), QComboBox | QLineEdit | QAbstractSpinBox | QAbstractItemView)
            inner |= control.metaObject().className() == "QComboBoxListView"
            if inner or control.objectName().startswith("qt_") or isinstance(control, QHeaderView):
                continue
            what = (view.objectName() or view.windowTitle(), control.metaObject().className(), control.property("text"))
            by_itself = isinstance(control.parent(), QDialogButtonBox)  # OK, Cancel, Close say what they do
            assert control.toolTip() or by_itself, what
            assert control.focusPolicy() & Qt.FocusPolicy.TabFocus, what
            seen += 1
    for dialog in dialogs:
        dialog.reject()
    assert seen > 80


def entries(menu, path=()):
    """Every entry of a menu and of those below it: the way to it, the menu that holds it, the entry."""
    for action in menu.actions():
        if action.menu() is not None:
            yield from entries(action.menu(), (*path, action.text()))
        else:
            yield (*path, action.text()), menu, action


def click_entry(viewer, *way):
    """Open the menu that holds an entry and click it with the mouse."""
    bar = viewer.window._qt_window.menuBar()
    found = [e for top in bar.actions() for e in entries(top.menu(), (top.text(),)) if e[0] == way]
    ((_, menu, action),) = found
    menu.popup(QPoint(200, 200))
    QApplication.processEvents()
    QTest.mouseClick(menu, LEFT, NONE, menu.actionGeometry(action).center())
    QApplication.processEvents()


def test_menu_entries_do_what_they_say_when_clicked(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    double_click(bench, "strata", 0.5, 700.0)
    settle(bench, qtbot)
    (kept,) = anchors(bench)
    undo = ("&Layers", "Register", "Leadline", "Undo the last edit (Leadline)")
    click_entry(bench.viewer, *undo)
    assert anchors(bench) == ()
    click_entry(bench.viewer, *undo[:-1], "Redo the edit that was undone (Leadline)")
    assert anchors(bench) == (kept,)
    for title, dock in (("Brain", bench.brain), ("Channels", bench.table), ("Corrections", bench.corrections)):
        click_entry(bench.viewer, "&Plugins", "Leadline", f"{title} (Leadline)")
        assert dock.view.isVisible(), title
    bench.bring("section")


def test_errors_are_told_in_words_and_the_window_goes_on(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    double_click(bench, "strata", 0.5, 700.0)
    (anchor,) = anchors(bench)
    bench.section.controller._act(AddAnchor(replace(anchor, tip_distance_um=anchor.tip_distance_um + 100.0)))
    settle(bench, qtbot)
    assert any("anchors cross" in words for words in bench.told)
    assert len(anchors(bench)) == 1
    assert bench.brain.view.messages.count() >= 1

"""The canvas of a real viewer, worked with real mouse and key events."""

# ruff: noqa: E402 - what needs napari is imported only where there is one

import time

import numpy as np
import pandas as pd
import pytest

napari = pytest.importorskip("napari")
pytest.importorskip("pyqtgraph")

from qtpy.QtCore import QPoint, Qt
from qtpy.QtGui import QImage
from qtpy.QtTest import QTest
from tests.good_brain import write_good_brain
from tests.leadline_napari.screen.hands import (
    canvas_place,
    mouse,
    opened,
    settle,
)

from leadline_napari.views.work import QtProgress


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


def test_a_track_is_redrawn_by_hand_and_snapped_to_the_dye(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    bench.corrections.view.edit_button.click()
    layer = bench.viewer.layers["Track points"]
    before, end = layer.data.copy(), bench.section.controller.scene.end_um
    points = before.copy()
    points[3] += [0.0, 40.0, 60.0]
    layer.data = points
    settle(bench, qtbot)
    assert (finished / "track_edits.csv").is_file()
    assert abs(bench.section.controller.scene.end_um - end) > 0.1
    bench.corrections.view.snap_button.click()
    settle(bench, qtbot)
    assert np.linalg.norm(layer.data[3] - before[3]) < 20.0
    QTest.keyClick(bench.section.view.log, Qt.Key.Key_Z, Qt.KeyboardModifier.ControlModifier)
    settle(bench, qtbot)
    assert np.abs(layer.data - points).max() < 0.02
    layer.selected_data = {2}
    layer.remove_selected()
    settle(bench, qtbot)
    assert len(bench.desk.session.edits.tracks[0].points_um) == 7
    bench.corrections._set("end", layer.data[-1] + [0.0, 0.0, 10.0])
    settle(bench, qtbot)
    assert bench.desk.session.edits.tracks[0].points_um[-1][2] == pytest.approx(layer.data[-1][2], abs=0.01)
    bench.corrections.view.forget_button.click()
    settle(bench, qtbot)
    assert not (finished / "track_edits.csv").exists()
    assert bench.told == []


def test_pairs_refine_the_registration_only_once_they_are_accepted(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    bench.corrections._set("pair", np.array([2500.0, 3000.0, 2500.0]))
    bench.corrections._set("pair", np.array([2500.0, 3600.0, 2900.0]))
    ring = bench.viewer.layers["Pairs: place in the atlas"]
    ring.data = ring.data + np.array([60.0, 0.0, 0.0])
    ring.events.data(value=ring.data, action="changed", data_indices=(0, 1), vertex_indices=((),))
    settle(bench, qtbot)
    assert "60 um before" in bench.corrections.view.errors.text()
    assert not (finished / "registration_pairs.csv").exists()
    bench.corrections.view.preview_button.click()
    bench.corrections.view.accept_button.click()
    assert (finished / "registration_pairs.csv").is_file()
    bench.corrections.view.withdraw_button.click()
    assert not (finished / "registration_pairs.csv").exists()
    assert bench.told == []


def test_surfaces_and_the_plane_along_the_track_are_shown_in_3d(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    bench.brain.view.surfaces_button.click()
    settle(bench, qtbot)
    assert bench.viewer.dims.ndisplay == 3
    assert bench.viewer.dims.order == (0, 1, 2)  # in which napari draws surfaces, whatever else it is set to
    shown = [layer.name for layer in bench.viewer.layers if layer.visible]
    assert "Brain hull" in shown
    assert "CCB surface" in shown
    assert shown[-2:] == ["Tracks", "Contacts"]
    assert all({str(u) for u in layer.units} == {"micrometer"} for layer in bench.viewer.layers)
    bench.brain.view.plane_button.click()
    settle(bench, qtbot)
    image = bench.viewer.layers["Plane along track"]
    track = bench.section.controller.scene.shank.track
    order = list(bench.viewer.dims.order)
    normal = np.empty(3)
    normal[order] = np.array(image.plane.normal)
    normal /= np.array(image.scale)
    way = track.stack_um[-1] - track.stack_um[0]
    assert abs(normal @ way) < 1e-3 * np.linalg.norm(normal) * np.linalg.norm(way)


@pytest.mark.parametrize("solid", [False, True], ids=["2-D", "3-D"])
def test_points_of_a_track_are_moved_added_and_deleted_with_the_mouse(bench, qtbot, finished, solid):
    opened(bench, qtbot, finished)
    bench.bring("corrections")
    bench.corrections.view.edit_button.click()
    layer = bench.viewer.layers["Track points"]
    if solid:
        bench.layers._show_in_3d(True)
    settle(bench, qtbot)
    before = layer.data.copy()
    start = canvas_place(bench, before[3])
    mouse(bench, start, *(start + QPoint(3 * k, 0) for k in range(1, 7)))
    settle(bench, qtbot)
    assert layer.selected_data == {3}
    assert len(bench.desk.session.edits.tracks) == 1
    shift = layer.data[3] - before[3]
    assert 20.0 < np.linalg.norm(shift) < 2000.0
    np.testing.assert_allclose(np.delete(layer.data, 3, axis=0), np.delete(before, 3, axis=0), atol=0.02)
    bench.corrections.view.setFocus()
    layer.mode = "add"
    half = (layer.data[4] + layer.data[5]) / 2
    mouse(bench, canvas_place(bench, half))
    settle(bench, qtbot)
    assert len(layer.data) == len(bench.desk.session.edits.tracks[0].points_um) == 9
    if not solid:
        assert np.linalg.norm(layer.data - half, axis=1).min() < 200.0
    layer.mode = "select"
    layer.selected_data = {8}
    canvas = bench.viewer.window._qt_viewer.canvas.native
    canvas.setFocus()
    QTest.keyClick(canvas, Qt.Key.Key_Delete)
    settle(bench, qtbot)
    assert len(bench.desk.session.edits.tracks[0].points_um) == 8
    bench.corrections.view.forget_button.click()
    settle(bench, qtbot)
    assert bench.told == []


def test_slicing_off_the_screen_shows_the_same(bench, qtbot, finished):
    """napari's own setting for asynchronous slicing, which is the user's, changes nothing but when it is drawn."""
    from napari.settings import get_settings

    opened(bench, qtbot, finished)
    place_um = bench.viewer.layers["Contacts"].data[10]
    bench.canvas.go_to(place_um)
    settle(bench, qtbot)
    before = bench.viewer.screenshot(canvas_only=True, flash=False)
    get_settings().experimental.async_ = True
    try:
        bench.canvas.go_to(place_um + 500.0)
        bench.canvas.go_to(place_um)
        qtbot.waitUntil(lambda: all(layer.loaded for layer in bench.viewer.layers), timeout=30_000)
        qtbot.wait(200)
        after = bench.viewer.screenshot(canvas_only=True, flash=False)
    finally:
        get_settings().experimental.async_ = False
    assert np.mean(np.abs(before.astype(int) - after) > 30) < 0.002


def test_units_are_shown_as_points_coloured_by_a_column_of_their_own(bench, qtbot, finished):
    opened(bench, qtbot, finished)
    bench.brain.view.units_button.click()
    settle(bench, qtbot)
    assert bench.told == []
    layer, table = bench.viewer.layers["Units"], bench.layers.units
    assert len(layer.data) == table["track_depth_um"].notna().sum() > 3
    assert {str(u) for u in layer.units} == {"micrometer"}
    track = bench.results.tracks["A", 0]
    depth = layer.features["track_depth_um"].to_numpy(float)
    np.testing.assert_allclose(layer.data, track.stack_at(depth), atol=1e-6)
    box = bench.brain.view.unit_column
    assert box.isVisibleTo(bench.brain.view)
    box.setCurrentText("n_spikes")
    box.textActivated.emit("n_spikes")
    settle(bench, qtbot)
    layer = bench.viewer.layers["Units"]
    spikes = layer.features["n_spikes"].to_numpy(float)
    light = layer.face_color[:, :3] @ [0.2126, 0.7152, 0.0722]
    assert light[spikes.argmax()] > light[spikes.argmin()]
    assert "…" in bench.brain.view.legend.text()
    bench.brain.view.units_button.click()
    assert "Units" not in bench.viewer.layers


@pytest.mark.parametrize("suffix", [".png", ".svg", ".pdf"])
def test_the_canvas_is_saved_as_a_figure_with_its_scale_bar(bench, qtbot, finished, tmp_path, suffix):
    opened(bench, qtbot, finished)
    file = tmp_path / f"canvas{suffix}"
    bench.layers.save_figure(file)
    _, width = bench.canvas.size
    assert bench.viewer.canvas.overlays["scale_bar"].visible
    if suffix == ".png":
        image = QImage(str(file))
        assert image.width() > 2.5 * width
        assert image.dotsPerMeterX() == pytest.approx(300 / 0.0254, rel=0.01)
    elif suffix == ".svg":
        text = file.read_text()
        assert "<image" in text
        assert " mm</text>" in text
    else:
        assert file.read_bytes()[:5] == b"%PDF-"


def test_napari_itself_opens_a_brain_folder_and_offers_the_docks(bench, qtbot, finished):
    with qtbot.waitSignal(bench.opened, timeout=120_000):
        bench.viewer.open(str(finished), plugin="leadline")
    settle(bench, qtbot)
    assert bench.desk.brain.folder == finished
    assert "Contacts" in bench.viewer.layers
    _, widget = bench.viewer.window.add_plugin_dock_widget("leadline", "Section")
    assert widget is bench.section.view
    assert bench.told == []


def test_long_work_is_shown_in_the_activity_dock_and_cancelled_from_there(bench, qtbot, finished):
    from napari.utils.progress import progress

    opened(bench, qtbot, finished)
    seen = []

    def work():
        bench.brain.progress.begin("a long piece of work", 100)
        for _ in range(2000):
            bench.brain.progress.step(0.05)
            time.sleep(0.005)
        return "never"

    bench.brain.progress = QtProgress(bench)
    bench.runner.submit("run", work, seen.append, seen.append)
    qtbot.waitUntil(lambda: any(p.desc.startswith("a long") for p in progress._all_instances), timeout=10_000)
    (bar,) = [p for p in progress._all_instances if p.desc.startswith("a long")]
    qtbot.waitUntil(lambda: bar.n > 0, timeout=10_000)
    bar.cancel()
    qtbot.waitUntil(lambda: bool(seen), timeout=10_000)
    assert seen == [""]
    bench.brain.progress.finish()
    bench.brain.progress = None
    assert not [p for p in progress._all_instances if p.desc.startswith("a long")]


def test_the_demo_brain_is_written_off_the_screen_and_opened(bench, qtbot, monkeypatch):
    monkeypatch.setattr("leadline.demo.write.write_brain", lambda folder, *_: write_good_brain(folder))
    with qtbot.waitSignal(bench.opened, timeout=120_000):
        bench.viewer.open_sample("leadline", "demo")
    settle(bench, qtbot)
    assert bench.desk.brain.name == "tiny-01"
    assert [layer.name for layer in bench.viewer.layers] == ["Stack background", "Stack dye"]
    assert "run 'Trace'" in bench.section.view.banner.toolTip()
    assert bench.told == []

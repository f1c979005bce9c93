"""Mouse and key events as a person makes them, on a workbench."""

import numpy as np
from qtpy.QtCore import QEvent, QPoint, QPointF, Qt
from qtpy.QtGui import QMouseEvent
from qtpy.QtTest import QTest
from qtpy.QtWidgets import QApplication

LEFT, NONE = Qt.MouseButton.LeftButton, Qt.KeyboardModifier.NoModifier


def settle(bench, qtbot, timeout=120_000):
    """Wait until nothing is being worked out."""
    qtbot.waitUntil(lambda: not bench.busy, timeout=timeout)
    QApplication.processEvents()


def opened(bench, qtbot, folder):
    """Open a brain and wait until all of it is shown."""
    with qtbot.waitSignal(bench.opened, timeout=120_000):
        bench.open(folder)
    settle(bench, qtbot)
    return bench


def place(bench, kind, x, um):
    """Where in the log's viewport x (0 to 1) of a lane and um of the drawn scale lie."""
    log = bench.section.view.log
    box = next(c.plot.getViewBox() for c in log.columns if c.kind == kind)
    return log.mapFromScene(box.mapViewToScene(QPointF(x, um)))


def click(bench, at):
    """A click in the log's viewport."""
    QTest.mouseClick(bench.section.view.log.viewport(), LEFT, NONE, at)
    QApplication.processEvents()


def double_click(bench, kind, x, um):
    """A double click in a lane."""
    viewport, at = bench.section.view.log.viewport(), place(bench, kind, x, um)
    QTest.mouseMove(viewport, at)
    QTest.mouseDClick(viewport, LEFT, NONE, at)
    QTest.mouseRelease(viewport, LEFT, NONE, at)  # QTest leaves the second press open
    QApplication.processEvents()


def drag(bench, start, stop, steps=6):
    """A real drag: moves with the button down, which QTest's own moves do not carry."""
    viewport = bench.section.view.log.viewport()
    QTest.mouseMove(viewport, start)
    QTest.mousePress(viewport, LEFT, NONE, start)
    for k in range(1, steps + 1):
        at = QPointF(start) + (QPointF(stop) - QPointF(start)) * k / steps
        to = QPointF(viewport.mapToGlobal(at.toPoint()))
        QTest.qWait(20)  # moves that follow each other faster than a hand are left out by the scene
        QApplication.sendEvent(viewport, QMouseEvent(QEvent.Type.MouseMove, at, to, LEFT, LEFT, NONE))
    QTest.mouseRelease(viewport, LEFT, NONE, stop)
    QApplication.processEvents()


def tie_end(bench, anchor, end):
    """Where in the viewport the handle of a tie is."""
    y = anchor.track_depth_um if end == "depth" else bench.section.view.log.end_um - anchor.tip_distance_um
    at = place(bench, "band", 0.0 if end == "depth" else 1.0, y)
    return at + QPoint(6 if end == "depth" else -6, 0)


def anchors(bench):
    """Anchors of the session."""
    return bench.desk.session.edits.anchors


def canvas_place(bench, point_um):
    """Where on the canvas widget a place of the world is, in 2-D or 3-D: found by asking napari the way back."""
    canvas = bench.viewer.window._qt_viewer.canvas
    height, width = canvas.size
    order = list(bench.viewer.dims.displayed)
    wanted = np.asarray(point_um, float)[order]

    def away(at):
        here = np.array(canvas._map_canvas2world(tuple(at), canvas.view), float)[order]
        gap = here - wanted
        if len(order) == 3:
            view = np.array(bench.viewer.scene.camera.view_direction)
            gap = gap - (gap @ view) * view
        return gap

    at, step = np.array([width / 2, height / 2]), 20.0
    for _ in range(4):  # the way there is linear: a few Newton steps settle rounding
        start = away(at)
        slope = np.column_stack([(away(at + np.array(d) * step) - start) / step for d in ((1, 0), (0, 1))])
        at = at - np.linalg.lstsq(slope, start, rcond=None)[0]
    return QPoint(round(at[0]), round(at[1]))


def mouse(bench, *places):
    """Press at the first place on the canvas, move along the others, let go."""
    widget = bench.viewer.window._qt_viewer.canvas.native
    QTest.mouseMove(widget, places[0])
    QApplication.processEvents()
    QTest.mousePress(widget, LEFT, NONE, places[0])
    for at in places[1:]:
        to = QPointF(widget.mapToGlobal(at))
        QApplication.sendEvent(widget, QMouseEvent(QEvent.Type.MouseMove, QPointF(at), to, LEFT, LEFT, NONE))
        QApplication.processEvents()
    QTest.mouseRelease(widget, LEFT, NONE, places[-1])
    QApplication.processEvents()

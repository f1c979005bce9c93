# ruff: noqa: E402 - what needs napari is imported only where there is one
"""A whole session with real events, and the table that it leaves."""

import os
import shutil
import subprocess
import sys

import numpy as np
import pytest

napari = pytest.importorskip("napari")
pytest.importorskip("pyqtgraph")

from qtpy.QtCore import Qt
from qtpy.QtTest import QTest
from tests.good_brain import write_good_brain
from tests.leadline_napari.screen.hands import anchors, click, double_click, drag, opened, place, settle, tie_end

from leadline.io.brainfile import read_brain
from leadline.io.tables import suggestions_text
from leadline.model.anchor import Anchor, Suggestion
from leadline.pipeline.products import read_posteriors
from leadline.pipeline.run import run

CONTROL, SHIFT = Qt.KeyboardModifier.ControlModifier, Qt.KeyboardModifier.ShiftModifier


def suggest_at(brain, tip_um):
    """Leave one open suggestion where the run put that contact, whatever the tiny recording suggests by itself."""
    (posterior,) = read_posteriors(brain)
    depth = float(np.interp(tip_um, posterior.tip_distance_um, posterior.median_um))
    anchor = Anchor("A", 0, tip_um, round(depth, 1), 40.0, "an invented landmark")
    (brain.out / "suggestions.csv").write_text(suggestions_text([Suggestion(anchor, "invented", "")]))


@pytest.mark.slow
def test_a_whole_session_leaves_the_table_that_the_command_line_makes_of_its_anchors(bench, qtbot, tmp_path):
    file = write_good_brain(tmp_path / "mine")
    text = file.read_text()
    file.write_text(text[: text.index("[[anchor]]")])
    run(read_brain(file))
    suggest_at(read_brain(file), 800.0)
    opened(bench, qtbot, file.parent)
    log = bench.section.view.log

    bench.corrections.view.edit_button.click()
    layer = bench.viewer.layers["Track points"]
    points = layer.data.copy()
    points[2] += [0.0, 15.0, -20.0]
    layer.data = points
    settle(bench, qtbot)
    bench.corrections.view.edit_button.click()
    bench.docks["section"].raise_()

    border = next(r for r in bench.section.controller.scene.strata.runs if r.acronym == "CCB")
    double_click(bench, "strata", 0.5, border.top_um + 5.0)
    double_click(bench, "lane", 0.5, log.end_um - 300.0)
    settle(bench, qtbot)
    lower = anchors(bench)[1]
    drag(bench, tie_end(bench, lower, "depth"), place(bench, "band", 0.0, lower.track_depth_um + 60.0))
    log.setFocus()
    QTest.keyClick(log, Qt.Key.Key_Z, CONTROL)
    assert anchors(bench)[1] == lower
    QTest.keyClick(log, Qt.Key.Key_Z, CONTROL | SHIFT)
    assert anchors(bench)[1] != lower
    (suggested,) = [t for t in bench.section.view._state.band.ties if t.kind == "suggested"]
    click(bench, tie_end(bench, suggested.anchor, "depth"))
    QTest.keyClick(log, Qt.Key.Key_Return)
    settle(bench, qtbot)
    kept = anchors(bench)
    assert sorted(a.source for a in kept) == ["auto", "user", "user"]
    with qtbot.waitSignal(bench.opened, timeout=300_000):
        QTest.keyClick(log, Qt.Key.Key_S, CONTROL)
    settle(bench, qtbot)
    assert bench.told == []

    opened(bench, qtbot, file.parent)
    assert anchors(bench) == kept
    assert bench.desk.can_undo

    fresh = tmp_path / "theirs"
    shutil.copytree(file.parent, fresh, ignore=shutil.ignore_patterns("out", ".leadline"))
    (fresh / "out").mkdir()
    shutil.copy(file.parent / "out" / "anchors.csv", fresh / "out")
    command = [sys.executable, "-c", "from leadline.cli.main import main; main()", "run", str(fresh)]
    subprocess.run(command, check=True, capture_output=True, env=os.environ | {"OMP_NUM_THREADS": "1"})
    mine, theirs = (f / "out" / "channels.csv" for f in (file.parent, fresh))
    assert mine.read_bytes() == theirs.read_bytes()

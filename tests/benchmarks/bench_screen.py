"""The screens: a step of a drag, the exact answer after it, and the first picture of a stack of 20 GB.

Needs a display with OpenGL: ``xvfb-run -a -s "-screen 0 1600x1000x24" python -m tests.benchmarks screen``.
"""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
from tests.benchmarks.frame import MB, Row, in_child

ROWS, MANY_ROWS, SHANKS, STEPS = 96, 384, 4, 60
FRAME_S, ANSWER_S, OPEN_S, OPEN_MB = 0.016, 1.0, 5.0, 1500.0
LANES = ("ripple_power_db", "theta_power_db", "gamma_power_db", "unit_density_per_100um", "spike_amplitude_uv")
BIG = (
    "NRRD0005\ntype: uint16\ndimension: 3\nsizes: 2500 2000 2000\nspace: right-anterior-superior\n"
    'space directions: (2.5,0,0) (0,0,-2.5) (0,-3,0)\nspace units: "um" "um" "um"\n'
    "endian: little\nencoding: raw\ndata file: big.raw\n"
)


class Window:
    """A viewer with its docks and the tiny finished brain, on four shanks of many contacts."""

    def __init__(self, folder: Path, rows: int) -> None:
        import napari
        from qtpy.QtWidgets import QApplication
        from tests.leadline_napari.finished import write_finished

        from leadline_napari.workbench import workbench

        self.viewer = napari.Viewer()
        self.viewer.window._qt_window.resize(1280, 800)
        self.events, self.rows = QApplication.processEvents, rows
        self.bench = workbench(self.viewer)
        self.bench.show_docks()
        self.bench.open(write_finished(folder / "brain"))
        self.settle()
        self.grow()

    def settle(self) -> None:
        """Wait until nothing is being worked out."""
        self.events()
        while self.bench.busy:
            time.sleep(0.01)
            self.events()

    def grow(self) -> None:
        """Put four shanks of many rows in the place of the tiny one; its profile is spread over them."""
        from leadline.model.posterior import DepthPosterior
        from leadline.pipeline.exact import answer
        from leadline_napari.controllers.lanes import lanes_of
        from leadline_napari.controllers.live import live_of

        section = self.bench.section.controller
        scene, answers = section.scene, section.answers
        shanks = tuple(self._shank(scene.shank, k) for k in range(SHANKS))
        answers.scene = replace(scene, shanks=shanks, index=0, lanes=lanes_of(shanks[0].evidence.profile, None, 0))
        found = answer(self.bench.bench, shanks, ())[0]
        assert isinstance(found.posterior, DepthPosterior)
        answers.live = answers.base = live_of(found.posterior, found.located, shanks[0], ())
        section.show_lanes(LANES)
        self.settle()

    def _shank(self, small: Any, shank: int) -> Any:
        from leadline.model.probe import Probe
        from leadline.model.profile import Profile

        profile, number = small.evidence.profile, np.arange(self.rows)
        tip = np.linspace(profile.tip_distance_um[0], profile.tip_distance_um[-1], self.rows)
        contacts = Probe(
            tuple(f"c{k}" for k in number), 16.0 * (number % 2), tip, np.full(self.rows, shank), number + 1000 * shank
        )
        features = {n: np.interp(tip, profile.tip_distance_um, np.nan_to_num(v)) for n, v in profile.features.items()}
        spread = Profile("A", np.full(self.rows, shank), tip, features)
        evidence = replace(small.evidence, shank=shank, tip_distance_um=tip, profile=spread)
        return replace(small, track=replace(small.track, shank=shank), contacts=contacts, evidence=evidence)

    def anchor(self) -> Any:
        """Place one anchor in the middle, and wait for its answer."""
        from leadline_napari.session import AddAnchor

        section = self.bench.section.controller
        tip = float(section.scene.shank.evidence.tip_distance_um[self.rows // 2])
        from leadline.model.anchor import Anchor

        held = Anchor("A", 0, tip, round(section.live.depth_at(tip), 1))
        section.desk.act(AddAnchor(held))
        self.settle()
        return held

    def close(self) -> None:
        """Let go."""
        from leadline_napari.workbench import close_workbench

        close_workbench(self.viewer)
        self.viewer.close()


def drag(floating: bool, rows: int) -> dict[str, float]:
    """CPU seconds of a step of a drag: regions and odds of the quick answer, and the painting of every lane."""
    with TemporaryDirectory() as folder:
        window = Window(Path(folder), rows)
        if floating:
            window.bench.docks["section"].setFloating(True)
        held = window.anchor()
        section, spent = window.bench.section.controller, []
        for step in range(STEPS):
            begin = time.process_time()
            section.drag_to(held, "depth", held.track_depth_um + 2.0 * step)
            window.bench.layers.timer.stop()  # the canvas follows when the mouse rests
            window.events()
            spent.append(time.process_time() - begin)
        window.close()
    return {"median_s": float(np.median(spent)), "p95_s": float(np.percentile(spent, 95))}


def release() -> dict[str, float]:
    """From the release of an anchor to the exact answer: CPU seconds, wall, and the longest time in which the window
    did not answer."""
    with TemporaryDirectory() as folder:
        window = Window(Path(folder), ROWS)
        held = window.anchor()
        section = window.bench.section.controller
        section.drag_to(held, "depth", held.track_depth_um + 30.0)
        window.events()
        cpu, wall = time.process_time(), time.perf_counter()
        section.drop()
        gaps, last = [time.perf_counter() - wall], time.perf_counter()
        while not section.live.exact:
            time.sleep(0.001)
            window.events()
            gaps.append(time.perf_counter() - last)
            last = time.perf_counter()
        answer = {
            "cpu_s": time.process_time() - cpu, "wall_s": time.perf_counter() - wall, "blocked_s": max(gaps),
        }  # fmt: skip
        window.settle()
        window.close()
    return answer


def open_big() -> dict[str, float]:
    """CPU seconds to the first picture of a stack of 20 GB, and the memory that it takes."""
    import napari
    import psutil
    from tests.good_brain import write_good_brain

    from leadline_napari.workbench import close_workbench, workbench

    with TemporaryDirectory() as name:
        folder = Path(name)
        file = write_good_brain(folder)
        with (folder / "big.raw").open("wb") as handle:
            handle.truncate(2000 * 2000 * 2500 * 2)
        (folder / "big.nhdr").write_text(BIG)
        text = file.read_text().replace('background = "auto.ome.tif"', 'background = "big.nhdr"')
        file.write_text(text.replace('dye = "dye.ome.tif"\n', "").replace('orientation = "SAL"\n', ""))
        viewer = napari.Viewer()
        bench = workbench(viewer)
        bench.show_docks()
        me = psutil.Process()
        before, cpu = me.memory_info().rss, time.process_time()
        bench.open(folder)
        viewer.screenshot(canvas_only=True, flash=False)
        answer = {"cpu_s": time.process_time() - cpu, "grown_mb": (me.memory_info().rss - before) / MB}
        close_workbench(viewer)
        viewer.close()
    return answer


def rows() -> Iterator[Row]:
    """The rows of the table; none where there is no display."""
    if sys.platform.startswith("linux") and not os.environ.get("DISPLAY"):
        sys.stderr.write('no display: xvfb-run -a -s "-screen 0 1600x1000x24" python -m tests.benchmarks screen\n')
        return
    for floating, count in ((True, ROWS), (False, ROWS), (False, MANY_ROWS)):
        where = "section dock of its own" if floating else "section dock in the window"
        cost = in_child(drag, floating=floating, rows=count).answer
        yield Row(
            f"step of a drag, {where}", SHANKS * count, "contacts", cost["median_s"], FRAME_S,
            bar=1.0 if count == ROWS else None, reference="16 ms, a frame",
            note=f"95th percentile {cost['p95_s'] * 1e3:.1f} ms",
        )  # fmt: skip
    cost = in_child(release).answer
    yield Row(
        "exact answer after a drag", SHANKS * ROWS, "contacts", cost["cpu_s"], ANSWER_S, bar=1.0, reference="1 s",
        note=f"wall {cost['wall_s']:.2f} s, window without an answer at most {cost['blocked_s'] * 1e3:.0f} ms",
    )  # fmt: skip
    cost = in_child(open_big).answer
    yield Row(
        "first picture of a stack", 20, "GB", cost["cpu_s"], OPEN_S, bar=1.0, reference="5 s",
        peak_mb=cost["grown_mb"], peak_bar_mb=OPEN_MB, note="memory is what the process grew by",
    )  # fmt: skip

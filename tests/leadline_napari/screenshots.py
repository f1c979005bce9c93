"""Pictures of every screen, in light and dark, at 100 % and 200 %: ``make screenshots`` puts them where README looks.

    xvfb-run -a -s "-screen 0 2600x1700x24" python -m tests.leadline_napari.screenshots FOLDER [--brain BRAIN]

Without a brain the tiny finished one of the tests is shown; a brain must have been run.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

SCALES = (1, 2)
THEMES = ("dark", "light")
SIZE = (1280, 800)
LIMIT_S = 600.0


def main() -> None:
    """Draw every picture, each scale in a process of its own."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", type=Path)
    parser.add_argument("--brain", type=Path)
    parser.add_argument("--scale", type=int)
    given = parser.parse_args()
    given.folder.mkdir(parents=True, exist_ok=True)
    if given.scale is not None:
        draw(given.brain, given.folder, given.scale)
        return
    with tempfile.TemporaryDirectory() as scratch:
        brain = given.brain or tiny(Path(scratch) / "brain")
        for scale in SCALES:
            command = [sys.executable, "-m", "tests.leadline_napari.screenshots", str(given.folder)]
            command += ["--brain", str(brain), "--scale", str(scale)]
            subprocess.run(command, check=True, env=os.environ | {"QT_SCALE_FACTOR": str(scale)})


def tiny(folder: Path) -> Path:
    """The tiny brain of the tests, with its products."""
    from tests.leadline_napari.finished import write_finished

    return write_finished(folder)


def draw(brain: Path, folder: Path, scale: int) -> None:
    """Open the brain and take a picture of every screen in both appearances."""
    import napari
    from qtpy.QtWidgets import QApplication

    from leadline_napari.docks import close_workbench, workbench

    viewer = napari.Viewer(show=False)
    window = viewer.window._qt_window
    bench = workbench(viewer)

    def settle() -> None:
        end = time.monotonic() + LIMIT_S
        QApplication.processEvents()
        while time.monotonic() < end and (bench.runner.busy or bench._canvas_timer.isActive()):
            time.sleep(0.02)
            QApplication.processEvents()
        QApplication.processEvents()

    def take(name: str) -> None:
        for theme in THEMES:
            viewer.theme = theme
            settle()
            window.grab()  # lays out what is new; the screenshot below includes the OpenGL canvas
            viewer.screenshot(str(folder / f"{name}-{theme}-{scale}00.png"), canvas_only=False, flash=False)

    window.resize(*SIZE)
    window.show()
    bench.show_docks()
    bench.open(brain)
    settle()
    for name, show in scenes(bench).items():
        show()
        settle()
        take(name)
    for name, dialog in dialogs(bench).items():
        for theme in THEMES:
            viewer.theme = theme
            dialog.show()
            settle()
            dialog.grab().save(str(folder / f"{name}-{theme}-{scale}00.png"))
        dialog.close()
    close_workbench(viewer)
    viewer.close()


def scenes(bench: object) -> dict[str, object]:
    """What is done before each picture."""

    def section() -> None:
        bench.docks["section"].raise_()
        ties = [t for t in bench.sections._ties() if t.kind == "suggested"]
        for tie in ties[:2]:
            bench.sections.choose(tie.anchor)
            bench.sections.accept()
        bench.sections.step(1)
        tips = bench.sections.scene.shank.contacts.tip_distance_um
        bench.sections.pick(float(sorted(tips)[len(tips) // 2]))
        bench.sections.hover("tip", float(sorted(tips)[len(tips) // 2]))

    def suggestion() -> None:
        ties = [t for t in bench.sections._ties() if t.kind == "suggested"]
        if ties:
            bench.sections.choose(ties[-1].anchor)
        bench.sections.hover("tip", None)

    def corrections() -> None:
        bench.docks["corrections"].raise_()
        bench.corrections.edit_button.setChecked(True)

    def surfaces() -> None:
        bench.corrections.edit_button.setChecked(False)
        bench.docks["brain"].raise_()
        bench.show_surfaces()

    return {
        "section": section,
        "suggestion": suggestion,
        "brain": lambda: bench.docks["brain"].raise_(),
        "channels": lambda: bench.docks["table"].raise_(),
        "corrections": corrections,
        "surfaces": surfaces,
        "plane": bench.lay_plane,
    }


def dialogs(bench: object) -> dict[str, object]:
    """Dialogs, as pictures of their own."""
    import dataclasses

    from leadline.model.settings import Settings
    from leadline_napari.views.lanes import LaneDialog
    from leadline_napari.views.settings import SettingsDialog

    values = dataclasses.asdict(Settings())
    return {
        "lanes": LaneDialog(bench.section, bench.sections.scene.lanes, bench.sections.lane_names, {}),
        "settings": SettingsDialog(bench.brain, values, values),
    }


if __name__ == "__main__":
    main()

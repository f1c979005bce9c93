"""Pictures of every screen, in light and dark, at 100 % and 200 %: ``make screenshots`` puts them where README looks.

    xvfb-run -a -s "-screen 0 2600x1700x24" python -m tests.leadline_napari.screenshots FOLDER [--brain BRAIN]

Without a brain the tiny finished one of the tests is shown; a brain must have been run.
"""

from __future__ import annotations

import argparse
import os
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable

    from qtpy.QtWidgets import QDialog

    from leadline_napari.workbench import Workbench

SCALES = (1, 2)
THEMES = ("dark", "light")
SIZE = (1280, 800)
LIMIT_S = 600.0
LARGE_BYTES = 5_000_000


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
    beside = given.brain.resolve().parent if given.brain else None
    with tempfile.TemporaryDirectory(dir=beside) as scratch:
        brain = copied(given.brain, Path(scratch) / "brain") if given.brain else tiny(Path(scratch) / "brain")
        for scale in SCALES:
            command = [sys.executable, "-m", "tests.leadline_napari.screenshots", str(given.folder)]
            command += ["--brain", str(brain), "--scale", str(scale)]
            subprocess.run(command, check=True, env=os.environ | {"QT_SCALE_FACTOR": str(scale)})


def copied(brain: Path, folder: Path) -> Path:
    """The brain in a folder of its own, so that nothing is changed in the user's; what is large is linked."""

    def link_or_copy(source: str, target: str) -> None:
        (os.link if os.path.getsize(source) > LARGE_BYTES else shutil.copy2)(source, target)

    shutil.copytree(brain, folder, copy_function=link_or_copy)
    return folder


def tiny(folder: Path) -> Path:
    """The tiny brain of the tests, with its products."""
    from tests.leadline_napari.finished import write_finished

    return write_finished(folder)


def draw(brain: Path, folder: Path, scale: int) -> None:
    """Open the brain and take a picture of every screen in both appearances."""
    import napari
    from qtpy.QtWidgets import QApplication

    from leadline_napari.workbench import close_workbench, workbench

    viewer = napari.Viewer(show=False)
    window = viewer.window._qt_window
    bench = workbench(viewer)

    def settle() -> None:
        end = time.monotonic() + LIMIT_S
        QApplication.processEvents()
        while time.monotonic() < end and bench.busy:
            time.sleep(0.02)
            QApplication.processEvents()
        QApplication.processEvents()

    def take(name: str) -> None:
        for theme in THEMES:
            viewer.theme = theme
            settle()
            bench.brain.view.folder.setText(f"data/{bench.desk.brain.name}")  # no path of this machine in a picture
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


def scenes(bench: Workbench) -> dict[str, Callable[[], None]]:
    """What is done before each picture."""
    section, brain, corrections = bench.section.controller, bench.brain.view, bench.corrections

    def work() -> None:
        """Two suggestions accepted, the next one in hand, the cursor on a contact."""
        bench.bring("section")
        for tie in [t for t in section._ties() if t.kind == "suggested"][:2]:
            section.choose(tie.anchor)
            section.accept()
        section.step(1)
        tips = sorted(section.scene.shank.contacts.tip_distance_um)
        section.pick(float(tips[len(tips) // 2]))
        section.hover("tip", float(tips[len(tips) // 2]))

    def suggestion() -> None:
        section.hover("tip", None)
        ties = [t for t in section._ties() if t.kind == "suggested"]
        if ties:
            section.choose(ties[-1].anchor)

    def edit() -> None:
        bench.bring("corrections")
        corrections.view.edit_button.setChecked(True)
        for share in (0.4, 0.6):
            corrections._set("pair", section.scene.shank.track.stack_at(section.scene.end_um * share))

    def units() -> None:
        corrections.view.edit_button.setChecked(False)
        for _ in range(2):
            corrections._delete_pair(0)
        bench.bring("brain")
        brain.units_button.click()

    def surfaces() -> None:
        brain.units_button.click()
        bench.layers.show_surfaces()

    return {
        "section": work,
        "suggestion": suggestion,
        "brain": lambda: bench.bring("brain"),
        "channels": lambda: bench.bring("table"),
        "corrections": edit,
        "units": units,
        "surfaces": surfaces,
        "plane": bench.layers.lay_plane,
    }


def dialogs(bench: Workbench) -> dict[str, QDialog]:
    """Dialogs, as pictures of their own."""
    return {"lanes": bench.section.choose_lanes(), "settings": bench.brain.choose_settings()}


if __name__ == "__main__":
    main()

"""One brain in one viewer: what is open, what has been read of it, and the docks that show it."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QObject, Signal

from leadline.io.brainfile import read_brain
from leadline.pipeline.bench import Bench
from leadline_napari.controllers.desk import Desk
from leadline_napari.docks.brain import BrainDock
from leadline_napari.docks.canvas import CanvasDesk
from leadline_napari.docks.corrections import CorrectionDock
from leadline_napari.docks.section import SectionDock
from leadline_napari.docks.table import TableDock
from leadline_napari.results import Results, read_results
from leadline_napari.session import SelectChannel, SelectShank
from leadline_napari.style import DARK, LIGHT, Theme
from leadline_napari.views.canvas import Canvas
from leadline_napari.views.work import QtProgress, QtRunner

if TYPE_CHECKING:
    import napari

    from leadline.model.brain import Brain
    from leadline.model.track import Track
    from leadline_napari.session import Session

DOCKS = (("Brain", "brain"), ("Section", "section"), ("Channels", "table"), ("Corrections", "corrections"))


def theme_of(viewer: napari.Viewer) -> Theme:
    """Colours that go with the viewer's appearance."""
    from napari.utils.theme import get_theme

    return LIGHT if get_theme(viewer.theme).type == "light" else DARK


class Workbench(QObject):
    """Everything of one viewer. ``opened`` is sent when a brain's products have been read, ``failed`` with words."""

    opened = Signal()
    failed = Signal(str)

    def __init__(self, viewer: napari.Viewer) -> None:
        super().__init__(viewer.window._qt_window)
        self.viewer, self.theme = viewer, theme_of(viewer)
        self.canvas, self.runner = Canvas(viewer), QtRunner(self)
        self.desk: Desk | None = None
        self.bench: Bench | None = None
        self.results: Results | None = None
        self.brain, self.section, self.table = BrainDock(self), SectionDock(self), TableDock(self)
        self.corrections = CorrectionDock(self)
        self.layers = CanvasDesk(self, self.brain.view)
        self.docks: dict[str, Any] = {}
        self.brain.view.penetration_chosen.connect(self._choose_penetration)
        viewer.events.theme.connect(self._theme_changed)

    def show_docks(self) -> None:
        """Add every dock that is not there yet, as tabs on the right."""
        tabs = None
        for title, name in DOCKS:
            if name not in self.docks:
                self.docks[name] = self.viewer.window.add_dock_widget(
                    getattr(self, name).view, name=title, area="right", tabify=tabs is not None
                )
            tabs = self.docks[name]
        self.bring("section")
        self.layers.fit.start()

    def bring(self, name: str) -> None:
        """Bring a dock to the front."""
        if name in self.docks:
            self.docks[name].raise_()

    @property
    def busy(self) -> bool:
        """Whether anything is being worked out or about to be drawn."""
        return self.runner.busy or self.layers.timer.isActive() or self.layers.fit.isActive()

    # -- opening ------------------------------------------------------------------------------------------------

    def open(self, path: Path) -> None:
        """Open a brain: the stack is shown at once, the rest as it is read.

        Raises LeadlineError when brain.toml or the stack cannot be read.
        """
        brain = read_brain(Path(path))
        bench = Bench(brain)
        desk = Desk(brain)
        section = self.section.begin(desk)
        self.layers.begin(bench, section)
        self.viewer.title = f"Leadline — {brain.name}"
        self.desk, self.bench, self.results = desk, bench, None
        desk.listen(self._session_changed)
        self.brain.begin(desk)
        self.read()

    def open_demo(self) -> None:
        """Write the invented brain to a folder of its own and open it."""
        from tempfile import mkdtemp

        from leadline.demo.recipe import Recipe
        from leadline.demo.write import write_brain

        folder = Path(mkdtemp(prefix="leadline-demo-"))
        progress = QtProgress(self)

        def done(_: object) -> None:
            progress.finish()
            self.open(folder)

        def failed(words: str) -> None:
            progress.finish()
            self.tell(words or "The demo brain was not written to its end")

        self.runner.submit("demo", lambda: write_brain(folder, Recipe(), progress), done, failed)

    def take(self, brain: Brain) -> None:
        """Take a brain whose files were written anew, and read what they hold."""
        self.desk.reload(brain)
        self.bench = Bench(brain)
        self.read()

    def read(self) -> None:
        """Read the atlas and what the stages have written."""
        bench, desk = self.bench, self.desk
        if bench is None or desk is None:
            return

        def load() -> Results:
            bench.atlas  # noqa: B018 - read here, off the screen, and kept
            return read_results(desk.brain)

        self.runner.submit("results", load, self._loaded, self.tell)

    def _loaded(self, results: object) -> None:
        assert isinstance(results, Results)
        self.results = results
        self.layers.open(self.bench, results)
        self.table.show()
        self.brain.open(results)
        self.section.controller.open(self.bench, results)
        self.corrections.open()
        self.opened.emit()

    def retrack(self, track: Track) -> None:
        """Take a track that has just been redrawn; the tables follow at the next run."""
        if self.results is None:
            return
        tracks = dict(self.results.tracks) | {(track.penetration, track.shank): track}
        self.results = replace(self.results, tracks=tracks)
        self.layers.show_tracks(self.results)
        self.section.controller.open(self.bench, self.results)

    def run(self, until: str) -> None:
        """Run the pipeline up to a stage."""
        self.brain.run(until)

    def tell(self, words: str) -> None:
        """Say something to the user: in the Brain dock, and as napari's own notification."""
        if not words:
            return
        self.brain.tell(words)
        self.failed.emit(words)
        from napari.utils.notifications import show_warning

        show_warning(words)

    # -- what is in hand ----------------------------------------------------------------------------------------

    def choose(self, penetration: str, channel: int, shank: int | None = None) -> None:
        """Take a channel in hand, everywhere."""
        if self.desk is None:
            return
        if shank is None and self.results is not None and self.results.channels is not None:
            table = self.results.channels
            rows = table[(table["penetration"] == penetration) & (table["channel"] == channel)]
            shank = int(rows["shank"].iloc[0]) if len(rows) else 0
        selection = self.desk.session.selection
        if (selection.penetration, selection.shank) != (penetration, shank):
            self.desk.act(SelectShank(penetration, shank or 0))
        self.desk.act(SelectChannel(channel))

    def _choose_penetration(self, name: str) -> None:
        """Take a penetration in hand; one without a track can still be drawn."""
        traced = self.results.tracks if self.results is not None else {}
        shanks = sorted(s for n, s in traced if n == name)
        self.section.controller.select_shank(name, shanks[0] if shanks else 0)
        self.bring("section" if shanks else "corrections")

    def _session_changed(self, before: Session, after: Session) -> None:
        if before.selection != after.selection:
            self.table.show()
            self.layers.show_chosen()
        if before.edits.anchors != after.edits.anchors:
            self.layers.timer.start()

    def _theme_changed(self, _event: object = None) -> None:
        self.theme = theme_of(self.viewer)
        self.section.view.set_theme(self.theme)

    def close(self) -> None:
        """Let go of everything."""
        self.layers.timer.stop()
        self.layers.fit.stop()
        self.viewer.events.theme.disconnect(self._theme_changed)
        self.runner.close()


_BENCHES: dict[int, Workbench] = {}


def workbench(viewer: napari.Viewer) -> Workbench:
    """The workbench of a viewer, made on first need."""
    viewer = getattr(viewer, "__wrapped__", viewer)  # menu entries get a proxy that hides what is private
    key = id(viewer)
    if key not in _BENCHES:
        bench = _BENCHES[key] = Workbench(viewer)
        bench.destroyed.connect(lambda: _BENCHES.pop(key, None))
    return _BENCHES[key]


def close_workbench(viewer: napari.Viewer) -> None:
    """Let go of a viewer's workbench, where it has one; its docks go with the window."""
    bench = _BENCHES.pop(id(viewer), None)
    if bench is not None:
        bench.close()

"""One brain in one viewer: docks, canvas and controllers wired together."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from qtpy.QtCore import QObject, QTimer, Signal
from qtpy.QtWidgets import QFileDialog, QWidget

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.pipeline.bench import Bench
from leadline_napari.controllers import canvas as layers
from leadline_napari.controllers.desk import Desk
from leadline_napari.controllers.runs import RunController, save_settings, settings_of
from leadline_napari.controllers.section import SectionController
from leadline_napari.controllers.table import table_of
from leadline_napari.editing import Editing
from leadline_napari.results import Results, read_results
from leadline_napari.style import DARK, LIGHT, Theme
from leadline_napari.views.brain import BrainView
from leadline_napari.views.canvas import Canvas
from leadline_napari.views.corrections import CorrectionView
from leadline_napari.views.section import SectionView
from leadline_napari.views.table import TableView
from leadline_napari.views.work import QtProgress, QtRunner

if TYPE_CHECKING:
    import napari

    from leadline.model.track import Track
    from leadline_napari.session import Session

CANVAS_DELAY_MS = 50
THICK_UM = 150.0
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
        self.viewer = viewer
        theme = theme_of(viewer)
        self.canvas = Canvas(viewer)
        self.runner = QtRunner(self)
        self.brain, self.section, self.table = BrainView(theme), SectionView(theme), TableView(theme)
        self.corrections = CorrectionView(theme)
        self.editing = Editing(self, self.corrections)
        self.docks: dict[str, Any] = {}
        self.desk: Desk | None = None
        self.bench: Bench | None = None
        self.results: Results | None = None
        self.sections: SectionController | None = None
        self.runs: RunController | None = None
        self.progress: QtProgress | None = None
        self._canvas_timer = QTimer(self)
        self._canvas_timer.setSingleShot(True)
        self._canvas_timer.setInterval(CANVAS_DELAY_MS)
        self._canvas_timer.timeout.connect(self._paint_contacts)
        self._wire()
        viewer.events.theme.connect(self._theme_changed)

    # -- docks --------------------------------------------------------------------------------------------------

    def view(self, name: str) -> QWidget:
        """The widget of a dock: 'brain', 'section', 'table' or 'corrections'."""
        views = {"brain": self.brain, "section": self.section, "table": self.table, "corrections": self.corrections}
        return views[name]

    def show_docks(self) -> None:
        """Add every dock that is not there yet, as tabs on the right."""
        tabs = None
        for title, name in DOCKS:
            if name not in self.docks:
                self.docks[name] = self.viewer.window.add_dock_widget(
                    self.view(name), name=title, area="right", tabify=tabs is not None
                )
            tabs = self.docks[name]
        self.docks["section"].raise_()

    # -- opening ------------------------------------------------------------------------------------------------

    def open(self, path: Path) -> None:
        """Open a brain: the stack is shown at once, the rest as it is read.

        Raises LeadlineError when brain.toml or the stack cannot be read.
        """
        brain = read_brain(Path(path))
        bench = Bench(brain)
        specs = layers.stack_specs(bench)
        code = bench.background.finest.code
        self.viewer.layers.clear()
        self.canvas.put_stack(specs, layers.pose_of(code))
        self.canvas.thick(THICK_UM)
        self.viewer.title = f"Leadline — {brain.name}"
        self._begin(Desk(brain), bench)

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

    def _begin(self, desk: Desk, bench: Bench) -> None:
        self.desk, self.bench, self.results = desk, bench, None
        self.sections = SectionController(desk, _SectionDoor(self.section), self.runner, self.tell)
        self.sections.answered = self._canvas_timer.start
        self.runs = RunController(desk, self.brain, self.runner, self._run_ended)
        desk.listen(self._session_changed)
        self.runs.open(Results())
        self.sections._show()
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
        assert self.bench is not None
        assert self.sections is not None
        assert self.runs is not None
        self.results = results
        code = self.bench.background.finest.code
        if results.registration is not None:
            self.canvas.put(layers.outline_spec(self.bench, results.registration))
        if results.tracks:
            self.canvas.put(layers.track_spec(results.tracks, code))
        if results.channels is not None and results.tracks:
            spec = layers.contact_spec(results.channels, results.tracks, self.bench.atlas.structures, code)
            new = spec.name not in self.viewer.layers
            self.canvas.put(spec)
            if new:
                self.canvas.on_pick(spec.name, self._contact_picked)
        self._show_table()
        self.runs.open(results)
        self.sections.open(self.bench, results)
        self.editing.open()
        self.opened.emit()

    def retrack(self, results: Results) -> None:
        """Take products in which a track has just been redrawn; the tables follow at the next run."""
        self.results = results
        self.canvas.put(layers.track_spec(results.tracks, self.bench.background.finest.code))
        self.sections.open(self.bench, results)
        self.editing.controller.results = results

    def tell(self, words: str) -> None:
        """Say something to the user: in the Brain dock, and as napari's own notification."""
        if not words:
            return
        if self.runs is not None:
            self.runs.tell(words)
        self.failed.emit(words)
        from napari.utils.notifications import show_warning

        show_warning(words)

    # -- wiring -------------------------------------------------------------------------------------------------

    def _wire(self) -> None:
        s = self.section
        for signal, name in (
            (s.log.double_clicked, "add_at"), (s.log.hovered, "hover"), (s.log.picked, "pick"), (s.nudge, "nudge"),
            (s.stepped, "step"), (s.deleted, "delete"), (s.accepted, "accept"), (s.undo_asked, "undo"),
            (s.redo_asked, "redo"), (s.shank_chosen, "select_shank"), (s.tissue_chosen, "show_tissue"),
            (s.anchor_chosen, "choose"), (s.anchor_changed, "change"), (s.dragged, "drag_to"), (s.dropped, "drop"),
            (s.restore_asked, "restore_suggestions"),
        ):  # fmt: skip
            signal.connect(lambda *values, name=name: self._section(name, *values))
        s.let_go.connect(lambda: self._section("choose", None))
        s.insert_asked.connect(self._insert)
        s.update_asked.connect(lambda: self.run("locate"))
        s.save_asked.connect(self._save_section)
        s.lanes_asked.connect(self._choose_lanes)
        s.second_asked.connect(self._choose_second)
        b = self.brain
        b.run_asked.connect(self.run)
        b.cancel_asked.connect(self.cancel)
        b.open_asked.connect(self._choose_brain)
        b.settings_asked.connect(self._choose_settings)
        b.penetration_chosen.connect(self._choose_penetration)
        b.view_3d_asked.connect(self.show_surfaces)
        b.plane_asked.connect(self.lay_plane)
        self.table.channel_chosen.connect(self._channel_chosen)

    def _section(self, name: str, *values: object) -> None:
        if self.sections is not None:
            getattr(self.sections, name)(*values)

    def _insert(self) -> None:
        """The keyboard's way to an anchor: at the chosen contact, else in the middle of the probe."""
        if self.sections is None or self.sections.scene is None:
            return
        contacts = self.sections.scene.shank.contacts
        channel = self.desk.session.selection.channel
        rows = np.flatnonzero(contacts.channel == channel) if channel is not None else []
        tip = contacts.tip_distance_um[rows[0]] if len(rows) else np.median(contacts.tip_distance_um)
        self.sections.add_at("tip", float(tip))

    def _theme_changed(self, _event: object = None) -> None:
        self.section.set_theme(theme_of(self.viewer))

    # -- runs ---------------------------------------------------------------------------------------------------

    def run(self, until: str) -> None:
        """Run the pipeline up to a stage."""
        if self.runs is None or self.runs.running:
            return
        progress = self.progress = QtProgress(self)
        progress.began.connect(lambda label, total: self.brain.show_progress(label, 0, total))
        progress.moved.connect(lambda done: self.brain.show_progress(self.brain.bar.format(), done, progress.total))
        progress.said.connect(self.runs.tell)
        self.runs.start(until, progress)

    def cancel(self) -> None:
        """Stop the run at its next step."""
        if self.progress is not None:
            self.progress.cancel()

    def _run_ended(self) -> None:
        if self.progress is not None:
            self.progress.finish()
            self.progress = None
        try:
            brain = read_brain(self.desk.brain.file)
            self.desk.reload(brain)
        except LeadlineError as error:
            self.tell(str(error))
            return
        self.bench = Bench(brain)
        self.read()

    # -- selection ----------------------------------------------------------------------------------------------

    def _session_changed(self, before: Session, after: Session) -> None:
        if before.selection != after.selection:
            self._show_chosen()
        if before.edits.anchors != after.edits.anchors:
            self._canvas_timer.start()

    def _show_chosen(self) -> None:
        chosen = self.desk.session.selection
        self._show_table()
        spec_name = layers.NAMES["contacts"]
        if spec_name not in self.viewer.layers:
            return
        layer = self.viewer.layers[spec_name]
        if chosen.channel is None:
            self.canvas.mark(spec_name, None)
            return
        features = layer.features
        rows = np.flatnonzero((features["penetration"] == chosen.penetration) & (features["channel"] == chosen.channel))
        if rows.size:
            self.canvas.mark(spec_name, int(rows[0]))
            if self.viewer.dims.ndisplay == 2:
                self.canvas.go_to(layer.data[rows[0]])

    def _contact_picked(self, row: int) -> None:
        features = self.viewer.layers[layers.NAMES["contacts"]].features.iloc[row]
        self._channel_chosen(str(features["penetration"]), int(features["channel"]), int(features["shank"]))

    def _channel_chosen(self, penetration: str, channel: int, shank: int | None = None) -> None:
        from leadline_napari.session import SelectChannel, SelectShank

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
        if self.sections is not None and self.results is not None:
            shanks = sorted(s for n, s in self.results.tracks if n == name)
            if shanks:
                self.sections.select_shank(name, shanks[0])
                self.docks["section"].raise_() if "section" in self.docks else None

    # -- canvas -------------------------------------------------------------------------------------------------

    def _paint_contacts(self) -> None:
        """Recolour and move the contacts of the shank in hand, after the section has been redrawn."""
        section = self.sections
        name = layers.NAMES["contacts"]
        if section is None or section.scene is None or section.live is None or name not in self.viewer.layers:
            return
        layer, scene, live = self.viewer.layers[name], section.scene, section.live
        features = layer.features
        track = scene.shank.track
        rows = np.flatnonzero((features["penetration"] == track.penetration) & (features["shank"] == track.shank))
        order = {int(c): k for k, c in enumerate(scene.shank.contacts.channel)}
        mine = np.array([order[int(c)] for c in features["channel"].iloc[rows]], int)
        depth = np.array([live.depth_at(float(t)) for t in scene.shank.contacts.tip_distance_um])[mine]
        data = layer.data.copy()
        data[rows] = track.stack_at(depth)
        colours = layer.face_color.copy()
        colours[rows] = layers.contact_colours(live.contact_region[mine], self.bench.atlas.structures)
        layer.data = data
        layer.face_color = layer.border_color = colours

    def show_surfaces(self) -> None:
        """Work out the surfaces and turn to 3-D, or back to sections."""
        if self.viewer.dims.ndisplay == 3:
            self._show_in_3d(False)
            return
        results, bench = self.results, self.bench
        if results is None or results.registration is None or bench is None:
            self.tell("The surfaces need a registered brain: run 'Register' in the Brain dock")
            return
        if layers.NAMES["hull"] in self.viewer.layers:
            self._show_in_3d(True)
            return
        code = bench.background.finest.code
        self.runner.submit(
            "surfaces",
            lambda: layers.surface_specs(bench.atlas, results.registration, results, code),
            self._surfaces_ready,
            self.tell,
        )

    def _surfaces_ready(self, specs: object) -> None:
        for spec in specs:
            self.canvas.put(spec)
        for name in (layers.NAMES["tracks"], layers.NAMES["contacts"]):
            if name in self.viewer.layers:
                index = self.viewer.layers.index(name)
                self.viewer.layers.move(index, len(self.viewer.layers))
        self._show_in_3d(True)

    def _show_in_3d(self, on: bool) -> None:
        """Turn to 3-D or back. Slices are put away before and brought back after: as volumes they would cost much."""
        flat = {layers.NAMES["background"], layers.NAMES["dye"], layers.NAMES["outlines"]}
        slices = [layer for layer in self.viewer.layers if layer.name in flat]
        solid = [
            layer
            for layer in self.viewer.layers
            if layer.name == layers.NAMES["hull"] or layer.name.endswith(" surface")
        ]
        for layer in self.viewer.layers:
            if layer.name == layers.NAMES["plane"]:
                layer.visible = False
        for layer in slices if on else solid:
            layer.visible = False
        self.viewer.dims.ndisplay = 3 if on else 2
        for layer in solid if on else slices:
            layer.visible = True
        self.viewer.reset_view()
        if on:
            self.canvas.look_down()

    def lay_plane(self) -> None:
        """Lay the slice plane along the selected track."""
        if self.sections is None or self.sections.scene is None or self.bench is None:
            self.tell("Choose a track first")
            return
        bench, track = self.bench, self.sections.scene.shank.track
        if layers.NAMES["plane"] in self.viewer.layers:
            self._lay(track)
            return
        ready = partial(self._plane_ready, track)
        self.runner.submit("plane", lambda: layers.plane_spec(bench), ready, self.tell)

    def _plane_ready(self, track: Track, spec: Any) -> None:
        self.canvas.put(spec)
        self.viewer.layers.move(self.viewer.layers.index(spec.name), 0)
        self._lay(track)

    def _lay(self, track: Track) -> None:
        self._show_in_3d(True)
        for layer in self.viewer.layers:
            if layer.name.endswith(" surface") or layer.name == layers.NAMES["hull"]:
                layer.visible = False
        self.canvas.lay_plane(layers.NAMES["plane"], *layers.slice_plane(track))

    # -- table --------------------------------------------------------------------------------------------------

    def _show_table(self) -> None:
        if self.results is None or self.results.channels is None or self.bench is None:
            return
        chosen = self.desk.session.selection
        self.table.show_state(table_of(self.results.channels, self.bench.atlas.structures, chosen))

    # -- dialogs ------------------------------------------------------------------------------------------------

    def _choose_brain(self) -> None:
        folder = QFileDialog.getExistingDirectory(self.brain, "Open a brain: the folder that holds brain.toml")
        if folder:
            try:
                self.open(Path(folder))
            except LeadlineError as error:
                self.tell(str(error))

    def _choose_second(self) -> None:
        file, _ = QFileDialog.getOpenFileName(self.section, "A second reader's anchors", "", "Anchors (*.csv)")
        self._section("show_second", Path(file) if file else None)

    def _choose_lanes(self) -> None:
        from leadline_napari.views.lanes import LaneDialog

        if self.sections is None or self.sections.scene is None:
            return
        dialog = LaneDialog(self.section, self.sections.scene.lanes, self.sections.lane_names, self.sections.ranges)
        dialog.changed.connect(lambda names: self.sections.show_lanes(names))
        dialog.ranged.connect(lambda name, low, high: self.sections.set_range(name, low, high))
        dialog.open()

    def _choose_settings(self) -> None:
        from leadline_napari.views.settings import SettingsDialog

        if self.desk is None:
            return
        from leadline.model.settings import Settings

        dialog = SettingsDialog(self.brain, settings_of(self.desk.brain), _as_dict(Settings()))
        dialog.accepted_changes.connect(self._settings_changed)
        dialog.open()

    def _settings_changed(self, changes: object) -> None:
        try:
            self.desk.reload(save_settings(self.desk.brain, changes))
        except LeadlineError as error:
            self.tell(str(error))
            return
        self.bench = Bench(self.desk.brain)
        self.read()

    def _save_section(self) -> None:
        from leadline_napari.views.figures import FILTER, save_view

        file, _ = QFileDialog.getSaveFileName(self.section, "Save the section", "section.svg", FILTER)
        if file:
            save_view(self.section.log, Path(file))

    def close(self) -> None:
        """Let go of everything."""
        self._canvas_timer.stop()
        self.viewer.events.theme.disconnect(self._theme_changed)
        self.runner.close()


class _SectionDoor:
    """The section view as its controller sees it."""

    def __init__(self, view: SectionView) -> None:
        self._view = view

    def show(self, state: Any) -> None:
        """Draw."""
        self._view.show_state(state)

    def show_readout(self, readout: Any) -> None:
        """Tell what lies under the cursor."""
        self._view.show_readout(readout)


def _as_dict(settings: object) -> dict[str, dict[str, object]]:
    import dataclasses

    return {stage: dict(values) for stage, values in dataclasses.asdict(settings).items()}


_BENCHES: dict[int, Workbench] = {}


def workbench(viewer: napari.Viewer) -> Workbench:
    """The workbench of a viewer, made on first need."""
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

"""The canvas, wired: layers of the brain that is open, contacts that follow the section, 3-D, units, figures."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from qtpy.QtCore import QSize, QTimer
from qtpy.QtWidgets import QFileDialog

from leadline.pipeline.units import unit_table
from leadline_napari.controllers import canvas as layers
from leadline_napari.controllers import units
from leadline_napari.views.figures import FILTER, PRINT_DPI, save_canvas

if TYPE_CHECKING:
    import pandas as pd

    from leadline.model.track import Track
    from leadline.pipeline.bench import Bench
    from leadline_napari.controllers.section import SectionController
    from leadline_napari.docks.host import Host
    from leadline_napari.results import Results
    from leadline_napari.views.brain import BrainView

DELAY_MS = 50
THICK_UM = 150.0
NAMES = layers.NAMES


class CanvasDesk:
    """What the canvas shows of one brain, and the buttons of the Brain dock that change it."""

    def __init__(self, host: Host, buttons: BrainView) -> None:
        self.host, self.buttons = host, buttons
        self.section: SectionController | None = None
        self.units: pd.DataFrame | None = None
        self.timer = QTimer(buttons)
        self.timer.setSingleShot(True)
        self.timer.setInterval(DELAY_MS)
        self.timer.timeout.connect(self.paint_contacts)
        self.fit = QTimer(buttons)  # the canvas has its size only once the docks beside it are laid out
        self.fit.setSingleShot(True)
        self.fit.timeout.connect(host.viewer.reset_view)
        buttons.view_3d_asked.connect(self.show_surfaces)
        buttons.plane_asked.connect(self.lay_plane)
        buttons.units_asked.connect(self.show_units)
        buttons.unit_column_chosen.connect(self.colour_units)
        buttons.save_asked.connect(self.choose_figure)

    # -- layers -------------------------------------------------------------------------------------------------

    def begin(self, bench: Bench, section: SectionController) -> None:
        """Show the stack of a brain that has just been opened; nothing else is known yet."""
        viewer = self.host.viewer
        specs = layers.stack_specs(bench)
        viewer.layers.clear()
        viewer.dims.ndisplay = 2
        self.host.canvas.put_stack(specs, layers.pose_of(bench.background.finest.code))
        self.host.canvas.thick(THICK_UM)
        self.fit.start()
        self.section, self.units = section, None
        self.buttons.show_units((), None)
        section.answers.arrived = self.timer.start

    def open(self, bench: Bench, results: Results) -> None:
        """Show what has been read of it."""
        canvas, code = self.host.canvas, bench.background.finest.code
        if results.registration is not None:
            canvas.put(layers.outline_spec(bench, results.registration))
        if results.tracks:
            self.show_tracks(results)
        if results.channels is not None and results.tracks:
            spec = layers.contact_spec(results.channels, results.tracks, bench.atlas.structures, code)
            new = spec.name not in self.host.viewer.layers
            canvas.put(spec)
            if new:
                canvas.on_pick(spec.name, self._picked)

    def show_tracks(self, results: Results) -> None:
        """Draw every track."""
        self.host.canvas.put(layers.track_spec(results.tracks, self.host.bench.background.finest.code))

    def _picked(self, row: int) -> None:
        features = self.host.viewer.layers[NAMES["contacts"]].features.iloc[row]
        self.host.choose(str(features["penetration"]), int(features["channel"]), int(features["shank"]))

    def show_chosen(self) -> None:
        """Frame the contact in hand and, in 2-D, go to its plane."""
        chosen, viewer = self.host.desk.session.selection, self.host.viewer
        if NAMES["contacts"] not in viewer.layers:
            return
        layer = viewer.layers[NAMES["contacts"]]
        features = layer.features
        rows = np.flatnonzero((features["penetration"] == chosen.penetration) & (features["channel"] == chosen.channel))
        self.host.canvas.mark(NAMES["contacts"], int(rows[0]) if rows.size else None)
        if rows.size and viewer.dims.ndisplay == 2:
            self.host.canvas.go_to(layer.data[rows[0]])

    def paint_contacts(self) -> None:
        """Recolour and move the contacts of the shank in hand, after the section has been redrawn."""
        section, viewer = self.section, self.host.viewer
        if section is None or section.scene is None or section.live is None or NAMES["contacts"] not in viewer.layers:
            return
        layer, scene, live = viewer.layers[NAMES["contacts"]], section.scene, section.live
        features, track = layer.features, scene.shank.track
        rows = np.flatnonzero((features["penetration"] == track.penetration) & (features["shank"] == track.shank))
        order = {int(c): k for k, c in enumerate(scene.shank.contacts.channel)}
        mine = np.array([order[int(c)] for c in features["channel"].iloc[rows]], int)
        depth = np.array([live.depth_at(float(t)) for t in scene.shank.contacts.tip_distance_um])[mine]
        data, colours = layer.data.copy(), layer.face_color.copy()
        data[rows] = track.stack_at(depth)
        colours[rows] = layers.contact_colours(live.contact_region[mine], self.host.bench.atlas.structures)
        layer.data = data
        layer.face_color = layer.border_color = colours

    # -- 3-D ----------------------------------------------------------------------------------------------------

    def show_surfaces(self) -> None:
        """Work out the surfaces and turn to 3-D, or back to sections."""
        host, bench, results = self.host, self.host.bench, self.host.results
        if host.viewer.dims.ndisplay == 3:
            self._show_in_3d(False)
        elif results is None or results.registration is None or bench is None:
            host.tell("The surfaces need a registered brain: run 'Register' in the Brain dock")
        elif NAMES["hull"] in host.viewer.layers:
            self._show_in_3d(True)
        else:
            code = bench.background.finest.code
            work = partial(layers.surface_specs, bench.atlas, results.registration, results, code)
            host.runner.submit("surfaces", work, self._surfaces_ready, host.tell)

    def _surfaces_ready(self, specs: Any) -> None:
        viewer = self.host.viewer
        for spec in specs:
            self.host.canvas.put(spec)
        for name in ("tracks", "contacts", "units"):
            if NAMES[name] in viewer.layers:
                viewer.layers.move(viewer.layers.index(NAMES[name]), len(viewer.layers))
        self._show_in_3d(True)

    def _show_in_3d(self, on: bool, *, solids: bool = True) -> None:
        """Turn to 3-D or back. Slices are put away before and brought back after: as volumes they would cost much."""
        viewer = self.host.viewer
        flat = {NAMES["background"], NAMES["dye"], NAMES["outlines"]}
        slices = [layer for layer in viewer.layers if layer.name in flat]
        solid = [layer for layer in viewer.layers if layer.name.endswith((" surface", NAMES["hull"]))]
        for layer in viewer.layers:
            if layer.name == NAMES["plane"]:
                layer.visible = False
        for layer in slices if on else solid:
            layer.visible = False
        viewer.dims.ndisplay = 3 if on else 2
        for layer in solid if on else slices:
            layer.visible = solids or not on
        if on:
            self.host.canvas.look_in()
        else:
            viewer.reset_view()

    def lay_plane(self) -> None:
        """Lay the slice plane along the selected track."""
        host, bench = self.host, self.host.bench
        if self.section is None or self.section.scene is None or bench is None:
            host.tell("Choose a track first")
            return
        track = self.section.scene.shank.track
        if NAMES["plane"] in host.viewer.layers:
            self._lay(track)
            return
        host.runner.submit("plane", partial(layers.plane_spec, bench), partial(self._plane_ready, track), host.tell)

    def _plane_ready(self, track: Track, spec: Any) -> None:
        viewer = self.host.viewer
        self.host.canvas.put(spec)
        viewer.layers.move(viewer.layers.index(spec.name), 0)
        self._lay(track)

    def _lay(self, track: Track) -> None:
        self._show_in_3d(True, solids=False)
        self.host.canvas.lay_plane(NAMES["plane"], *layers.slice_plane(track))

    # -- units --------------------------------------------------------------------------------------------------

    def show_units(self) -> None:
        """Work out where every unit sat and show them as points; or take them away again."""
        host, bench = self.host, self.host.bench
        if NAMES["units"] in host.viewer.layers:
            host.canvas.remove([NAMES["units"]])
            self.buttons.show_units((), None)
        elif bench is None or host.results is None or host.results.channels is None:
            host.tell("Units need located channels: run 'Locate' in the Brain dock")
        else:
            host.runner.submit("units", lambda: unit_table(bench.brain, bench), self._units_ready, host.tell)

    def _units_ready(self, table: Any) -> None:
        self.units = table
        self.colour_units(units.choices(table)[0])
        points = self.host.viewer.layers[NAMES["units"]].data
        if len(points) and self.host.viewer.dims.ndisplay == 2:
            self.host.canvas.go_to(points[len(points) // 2])

    def colour_units(self, column: str) -> None:
        """Colour the units by one of their columns."""
        host = self.host
        if self.units is None or host.results is None:
            return
        code = host.bench.background.finest.code
        spec, legend = units.unit_spec(self.units, column, host.results.tracks, host.bench.atlas.structures, code)
        host.canvas.put(spec)
        self.buttons.show_units(units.choices(self.units), legend)

    # -- figures ------------------------------------------------------------------------------------------------

    def choose_figure(self) -> None:
        """Ask for a file and save the canvas to it."""
        file, _ = QFileDialog.getSaveFileName(self.buttons, "Save the canvas", "canvas.png", FILTER)
        if file:
            self.save_figure(Path(file))

    def save_figure(self, path: Path) -> None:
        """Save the canvas at print resolution; its scale bar is drawn anew, as a vector."""
        viewer = self.host.viewer
        dpi = self.buttons.logicalDpiX()
        rgba = self.host.canvas.picture(PRINT_DPI / dpi)
        height, width = self.host.canvas.size
        save_canvas(rgba, QSize(width, height), dpi, 1.0 / viewer.scene.camera.zoom, self.host.theme, path)

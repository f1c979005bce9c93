"""The Corrections dock, wired: points on the canvas that a person moves, a track's, and pairs of places."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.errors import LeadlineError
from leadline_napari.controllers import canvas as layers
from leadline_napari.controllers.corrections import CorrectionController
from leadline_napari.views.corrections import CorrectionView

if TYPE_CHECKING:
    from leadline.base.arrays import FloatArray
    from leadline.model.track import Track
    from leadline_napari.docks.host import Host

EDIT_LAYER = "Track points"
DONE = ("added", "removed", "changed")
KEYS = (("Alt-E", "entry"), ("Alt-T", "end"), ("Alt-P", "pair"))


class CorrectionDock:
    """A track redrawn by hand, a registration corrected by pairs of places."""

    def __init__(self, host: Host) -> None:
        self.host = host
        self.view = view = CorrectionView(host.theme)
        self.controller: CorrectionController | None = None
        self._own = False
        for signal, do in (
            (view.edit_asked, self._edit), (view.snap_asked, lambda: self._do("snap")),
            (view.forget_asked, self._forget), (view.entry_asked, lambda: self._set("entry", self._centre())),
            (view.end_asked, lambda: self._set("end", self._centre())), (view.pair_deleted, self._delete_pair),
            (view.pair_asked, lambda: self._set("pair", self._centre())), (view.preview_asked, self._preview),
            (view.accept_asked, lambda: self._do("accept_pairs")), (view.pair_chosen, self._go_to_pair),
            (view.withdraw_asked, lambda: self._do("withdraw_pairs")),
        ):  # fmt: skip
            signal.connect(do)
        for key, what in KEYS:
            host.viewer.bind_key(key, self._at_cursor(what), overwrite=True)

    def open(self) -> None:
        """Take the desk and the products of the workbench."""
        host = self.host
        if self.controller is None or self.controller.desk is not host.desk:
            self.controller = CorrectionController(
                host.desk, self.view, host.runner, host.tell, self._retraced, self._edited, self._paired
            )
        self.controller.open(host.bench, host.results)
        self._paired()

    def _do(self, name: str) -> None:
        if self.controller is not None:
            getattr(self.controller, name)()

    # -- where --------------------------------------------------------------------------------------------------

    def _centre(self) -> FloatArray:
        """The place in the middle of the view, on the plane that is looked at."""
        viewer = self.host.viewer
        place = np.array(viewer.dims.point, float)[-3:]
        shown = list(viewer.dims.displayed)
        place[shown] = np.array(viewer.scene.camera.center)[-len(shown) :]
        return place

    def _at_cursor(self, what: str) -> Any:
        def pressed(viewer: Any) -> None:
            self._set(what, np.array(viewer.cursor.position, float)[-3:])

        return pressed

    def _set(self, what: str, at_um: FloatArray) -> None:
        if self.controller is None:
            return
        if what == "pair":
            registration = self.host.results.registration if self.host.results else None
            if registration is not None:
                self.controller.add_pair(at_um, registration.stack_to_atlas(at_um[None])[0])
        else:
            self.controller.set_end(what, at_um)

    # -- tracks -------------------------------------------------------------------------------------------------

    def _edit(self, on: bool) -> None:
        if self.controller is None:
            return
        canvas = self.host.canvas
        canvas.remove([EDIT_LAYER])
        if not on:
            self.controller.end()
            return
        points = self.controller.begin()
        if points is None:
            self.controller.end()
            return
        layer = canvas.put(layers.edit_spec(points, self.host.bench.background.finest.code, EDIT_LAYER))
        layer.mode = "select" if len(points) else "add"
        layer.events.data.connect(self._moved)
        self.host.viewer.layers.selection.active = layer
        if len(points):
            canvas.go_to(points[len(points) // 2])

    def _moved(self, event: Any) -> None:
        """The person moved, added or deleted a point."""
        if not self._own and str(getattr(event.action, "value", event.action)) in DONE:
            self.controller.draw(np.array(event.source.data, float))

    def _edited(self, points_um: FloatArray) -> None:
        """Someone else moved the points: undo, snapping, an end set."""
        viewer = self.host.viewer
        if EDIT_LAYER not in viewer.layers:
            return
        layer = viewer.layers[EDIT_LAYER]
        if layer.data.shape != points_um.shape or np.abs(layer.data - points_um).max() > 0.01:
            self._put(layer, points_um)

    def _put(self, layer: Any, points_um: Any) -> None:
        """Move points without taking it for the person's doing."""
        self._own = True
        try:
            layer.data = points_um
        finally:
            self._own = False

    def _forget(self) -> None:
        self.host.canvas.remove([EDIT_LAYER])
        self._do("forget")

    def _retraced(self, track: Track) -> None:
        self.host.retrack(track)
        self.controller.results = self.host.results

    # -- pairs --------------------------------------------------------------------------------------------------

    def _paired(self) -> None:
        """Draw both ends of every pair."""
        controller, results = self.controller, self.host.results
        if controller is None or results is None or results.registration is None:
            return
        stack = np.array([p.stack_um for p in controller.draft]).reshape(-1, 3)
        atlas = np.array([p.atlas_um for p in controller.draft]).reshape(-1, 3)
        specs = layers.pair_specs(stack, atlas, results.registration, self.host.bench.background.finest.code)
        if not len(stack):
            self.host.canvas.remove([s.name for s in specs])
            return
        for end, spec in enumerate(specs):
            if spec.name in self.host.viewer.layers and len(self.host.viewer.layers[spec.name].data) == len(spec.data):
                self._own = True
                try:
                    self.host.viewer.layers[spec.name].data = spec.data
                finally:
                    self._own = False
                continue
            self.host.canvas.remove([spec.name])
            layer = self.host.canvas.put(spec)
            layer.mode = "select"
            layer.events.data.connect(lambda event, end=end: self._pair_moved(event, end))

    def _pair_moved(self, event: Any, end: int) -> None:
        if self._own or str(getattr(event.action, "value", event.action)) != "changed":
            return
        data = np.array(event.source.data, float)
        registration = self.host.results.registration
        for index, pair in enumerate(self.controller.draft):
            old = np.array(pair.stack_um) if end == 0 else registration.atlas_to_stack(np.array([pair.atlas_um]))[0]
            if np.abs(data[index] - old).max() > 0.01:
                if end == 0:
                    self.controller.move_pair(index, data[index], None)
                else:
                    self.controller.move_pair(index, None, registration.stack_to_atlas(data[index : index + 1])[0])

    def _delete_pair(self, index: int) -> None:
        if self.controller is not None and 0 <= index < len(self.controller.draft):
            self.controller.delete_pair(index)

    def _go_to_pair(self, index: int) -> None:
        if self.controller is not None and 0 <= index < len(self.controller.draft):
            self.host.canvas.go_to(self.controller.draft[index].stack_um)

    def _preview(self, on: bool) -> None:
        """Draw the atlas as the pairs would refine it, or as it was found."""
        results = self.host.results
        if self.controller is None or results is None or results.registration is None:
            return
        try:
            shown = self.controller.preview() if on else results.registration
        except LeadlineError as error:
            self.host.tell(str(error))
            return
        self.host.canvas.put(layers.outline_spec(self.host.bench, shown))

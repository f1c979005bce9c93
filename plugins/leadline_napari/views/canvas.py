"""The canvas: layer specifications become napari layers, every one in um."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from napari.utils import Colormap, DirectLabelColormap

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable

    import napari
    from napari.layers import Layer

    from leadline_napari.states import LayerSpec, Pose

MAKERS = {"image": "add_image", "labels": "add_labels", "points": "add_points", "surface": "add_surface"}


def _blank(data: Any) -> Any:
    """Arrays of the same shapes that hold nothing and cost nothing."""
    import dask.array as da

    if isinstance(data, list):
        return [_blank(level) for level in data]
    return da.zeros(data.shape, dtype=data.dtype, chunks=(1, *data.shape[1:]))


class Canvas:
    """Layers of one brain in one viewer."""

    def __init__(self, viewer: napari.Viewer) -> None:
        self.viewer = viewer
        self._pose: Pose | None = None
        viewer.dims.events.ndisplay.connect(self.turn)

    def put(self, spec: LayerSpec) -> Layer:
        """Add a layer, or give the layer of that name its new data."""
        if spec.name in self.viewer.layers:
            layer = self.viewer.layers[spec.name]
            if spec.kind == "points" and len(layer.data) == len(spec.data) and "features" in spec.options:
                return self._refresh_points(layer, spec)
            index, visible = self.viewer.layers.index(layer), layer.visible
            active = self.viewer.layers.selection.active
            self.viewer.layers.remove(layer)
            fresh = self._add(spec)
            fresh.visible = visible
            self.viewer.layers.move(self.viewer.layers.index(fresh), index)
            # whoever is at work on another layer goes on there
            self.viewer.layers.selection.active = fresh if active is layer else active
            return fresh
        return self._add(spec)

    def put_stack(self, specs: Iterable[LayerSpec], pose: Pose) -> None:
        """Add images that may be large, and turn the canvas.

        napari looks at a new layer along its first axis, before it can be turned; in a flat file whose first axis is
        the fastest that alone would read all of it. So the layers are added blank and filled once the canvas is posed.
        """
        for spec in specs:
            self.put(replace(spec, data=_blank(spec.data)))
        self.pose(pose)
        for spec in specs:
            self.viewer.layers[spec.name].data = spec.data

    def _refresh_points(self, layer: Any, spec: LayerSpec) -> Layer:
        layer.data = spec.data
        layer.features = spec.options["features"]
        layer.face_color = layer.border_color = spec.options["face_color"]
        return layer

    def _add(self, spec: LayerSpec) -> Layer:
        options = dict(spec.options)
        if "colormap" in options and str(options["colormap"]).startswith("#"):
            options["colormap"] = Colormap(["#000000", options["colormap"]], name="dye")
        contour = options.pop("contour", None)
        if "direct_colours" in options:
            options["colormap"] = DirectLabelColormap(color_dict=options.pop("direct_colours"))
        layer = getattr(self.viewer, MAKERS[spec.kind])(spec.data, name=spec.name, units="um", **options)
        if contour is not None:
            layer.contour = contour
            layer.editable = False
        if spec.kind == "points":
            layer.selected_data = set()
        return layer

    def remove(self, names: Iterable[str]) -> None:
        """Take layers away."""
        for name in names:
            if name in self.viewer.layers:
                self.viewer.layers.remove(name)

    def pose(self, pose: Pose) -> None:
        """Turn the canvas as posed, now and whenever it changes between 2-D and 3-D; show a scale bar."""
        self._pose = pose
        bar = self.viewer.canvas.overlays["scale_bar"]
        bar.visible = True
        bar.box = True
        self.turn()
        self.viewer.reset_view()

    def turn(self, _event: object = None) -> None:
        """Lay the axes out for 2-D or 3-D. In 3-D they keep their stored order: napari 0.9 draws surfaces in that order
        whatever ``dims.order`` says, and points and images as it says."""
        pose = self._pose
        if pose is None:
            return
        solid = self.viewer.dims.ndisplay == 3
        self.viewer.dims.order = (0, 1, 2) if solid else pose.order
        self.viewer.scene.camera.orientation = pose.solid if solid else pose.flat

    def go_to(self, point_um: Any) -> None:
        """Scroll to the plane that holds a point."""
        step = [float(v) for v in point_um]
        self.viewer.dims.set_point(range(len(step)), step)

    def thick(self, um: float) -> None:
        """Show points within ``um`` of the plane."""
        margins = [um] * self.viewer.dims.ndim
        self.viewer.dims.margin_left = margins
        self.viewer.dims.margin_right = margins

    def lay_plane(self, name: str, point_um: Any, way: Any) -> None:
        """In 3-D, cut an image along the plane that holds a line of direction ``way`` and is nearest to a coronal one,
        and look straight at it.

        napari counts a plane's place and the camera's directions along the axes in the order in which they are shown.
        """
        layer = self.viewer.layers[name]
        self.viewer.dims.ndisplay = 3
        order = list(self.viewer.dims.order)
        way = np.asarray(way, float) / np.linalg.norm(way)
        flat = self._pose.order if self._pose is not None else (0, 1, 2)
        across = np.eye(3)[next(axis for axis in flat if abs(way[axis]) < 0.9)]
        normal = across - (across @ way) * way
        normal /= np.linalg.norm(normal)
        in_voxels = normal * np.asarray(layer.scale, float)
        layer.depiction = "plane"
        layer.plane.position = tuple(np.asarray(layer.world_to_data(np.asarray(point_um, float)), float)[order])
        layer.plane.normal = tuple((in_voxels / np.linalg.norm(in_voxels))[order])
        layer.plane.thickness = 1
        layer.visible = True
        camera = self.viewer.scene.camera
        camera.center = tuple(float(v) for v in np.asarray(point_um, float)[order])
        camera.set_view_direction(tuple(normal[order]), tuple(-way[order]))
        camera.zoom *= 0.8

    def look_in(self) -> None:
        """In 3-D, look at the brain from behind, from the left and from above."""
        self.viewer.reset_view()
        if self._pose is not None:
            self.viewer.scene.camera.set_view_direction(self._pose.view, self._pose.up)

    @property
    def size(self) -> tuple[int, int]:
        """Height and width in pixels of the screen."""
        height, width = self.viewer.canvas.size
        return int(height), int(width)

    def picture(self, times: float) -> Any:
        """What the canvas shows, ``(h, w, 4)`` uint8, ``times`` as fine as the screen; without napari's scale bar."""
        bar, camera = self.viewer.canvas.overlays["scale_bar"], self.viewer.scene.camera
        size = tuple(round(n * times) for n in self.size)
        zoom, bar.visible = camera.zoom, False
        try:
            camera.zoom = zoom * times  # a larger canvas alone would show more, not finer
            return self.viewer.screenshot(size=size, canvas_only=True, flash=False)
        finally:
            camera.zoom, bar.visible = zoom, True

    def on_pick(self, name: str, chosen: Callable[[int], None]) -> None:
        """Call ``chosen`` with the row of a point that is clicked."""
        layer = self.viewer.layers[name]

        def pressed(layer: Any, event: Any) -> Any:
            value = layer.get_value(
                event.position, view_direction=event.view_direction, dims_displayed=event.dims_displayed, world=True
            )
            if value is not None:
                chosen(int(value))
            yield

        layer.mouse_drag_callbacks.append(pressed)

    def mark(self, name: str, row: int | None) -> None:
        """Frame one point."""
        if name in self.viewer.layers:
            layer = self.viewer.layers[name]
            layer.selected_data = set() if row is None else {row}
            layer.refresh()

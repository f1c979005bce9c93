"""What the manifest names: docks, the demo brain, undo and redo."""

from __future__ import annotations

from importlib.util import find_spec
from typing import TYPE_CHECKING, Any

from leadline.base.errors import LeadlineError

if TYPE_CHECKING:
    import napari
    from qtpy.QtWidgets import QWidget

    from leadline_napari.workbench import Workbench

NO_LAYER = (None,)  # napari's sign that a reader has nothing for it to add
INSTALL = "The Leadline docks need pyqtgraph. Install it with:  pip install 'leadline[napari]'"


def brain_dock() -> QWidget:
    """The Brain dock."""
    return _dock("brain")


def section_dock() -> QWidget:
    """The Section dock."""
    return _dock("section")


def table_dock() -> QWidget:
    """The Channels dock."""
    return _dock("table")


def track_dock() -> QWidget:
    """The Corrections dock."""
    return _dock("corrections")


def undo(viewer: napari.Viewer) -> None:
    """Undo the last edit."""
    _section(viewer, "undo")


def redo(viewer: napari.Viewer) -> None:
    """Redo the edit that was undone."""
    _section(viewer, "redo")


def demo_layers() -> list[Any]:
    """Write the invented demo brain to a folder of its own, off the screen, and open it; 'Run all stages' does the
    rest."""
    bench = _workbench()
    bench.show_docks()
    bench.open_demo()
    # A sample must give a layer; this one stands in until the brain is there and takes its place.
    return [([[0.0, 0.0, 0.0]], {"name": "The demo brain is being written", "units": "um", "visible": False}, "points")]


def open_brain(path: Any) -> list[Any]:
    """Open a brain in the viewer at hand; the layers are added there, so napari gets none to add itself."""
    bench = _workbench()
    bench.open(path)
    bench.show_docks()
    return [NO_LAYER]


def _dock(name: str) -> QWidget:
    if find_spec("pyqtgraph") is None:
        from qtpy.QtWidgets import QLabel

        label = QLabel(INSTALL)
        label.setWordWrap(True)
        return label
    return getattr(_workbench(), name).view


def _workbench() -> Workbench:
    """The workbench of the viewer at hand."""
    import napari

    if find_spec("pyqtgraph") is None:
        raise LeadlineError("pyqtgraph is not installed", where="Leadline", mend=INSTALL)
    from leadline_napari.workbench import workbench

    return workbench(napari.current_viewer() or napari.Viewer())


def _section(viewer: napari.Viewer, name: str) -> None:
    from leadline_napari.workbench import workbench

    workbench(viewer).section.do(name)


def show(path: Any) -> None:
    """Open a window on a brain and stay until it is closed (``leadline view``)."""
    import napari

    from leadline_napari.workbench import workbench

    viewer = napari.Viewer()
    bench = workbench(viewer)
    bench.open(path)
    bench.show_docks()
    napari.run()

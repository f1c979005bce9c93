"""What the manifest names: docks, the demo brain, undo and redo."""

from __future__ import annotations

from importlib.util import find_spec
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import napari
    from qtpy.QtWidgets import QWidget

INSTALL = "The Leadline docks need pyqtgraph. Install it with:  pip install 'leadline[napari]'"


def brain_dock(viewer: napari.Viewer) -> QWidget:
    """The Brain dock."""
    return _dock(viewer, "brain")


def section_dock(viewer: napari.Viewer) -> QWidget:
    """The Section dock."""
    return _dock(viewer, "section")


def table_dock(viewer: napari.Viewer) -> QWidget:
    """The Channels dock."""
    return _dock(viewer, "table")


def track_dock(viewer: napari.Viewer) -> QWidget:
    """The Corrections dock."""
    return _dock(viewer, "corrections")


def undo(viewer: napari.Viewer) -> None:
    """Undo the last edit."""
    _section(viewer, "undo")


def redo(viewer: napari.Viewer) -> None:
    """Redo the edit that was undone."""
    _section(viewer, "redo")


def demo_layers() -> list[tuple[Any, dict[str, Any], str]]:
    """Write the invented demo brain to a folder of its own and open it with every dock."""
    from pathlib import Path
    from tempfile import mkdtemp

    from leadline.demo.write import write_demo

    folder = Path(mkdtemp(prefix="leadline-demo-"))
    write_demo(folder)
    return open_brain(folder)


def open_brain(path: Any) -> list[tuple[Any, dict[str, Any], str]]:
    """Open a brain in the viewer at hand; the layers are added there, so napari gets none to add itself."""
    import napari

    from leadline_napari.docks import workbench

    viewer = napari.current_viewer() or napari.Viewer()
    bench = workbench(viewer)
    bench.open(path)
    bench.show_docks()
    return [(None,)]  # type: ignore[list-item]


def _dock(viewer: napari.Viewer, name: str) -> QWidget:
    if find_spec("pyqtgraph") is None:
        from qtpy.QtWidgets import QLabel

        label = QLabel(INSTALL)
        label.setWordWrap(True)
        return label
    from leadline_napari.docks import workbench

    return workbench(viewer).view(name)


def _section(viewer: napari.Viewer, name: str) -> None:
    from leadline_napari.docks import workbench

    sections = workbench(viewer).sections
    if sections is not None:
        getattr(sections, name)()


def show(path: Any) -> None:
    """Open a window on a brain and stay until it is closed (``leadline view``)."""
    import napari

    from leadline_napari.docks import workbench

    viewer = napari.Viewer()
    bench = workbench(viewer)
    bench.open(path)
    bench.show_docks()
    napari.run()

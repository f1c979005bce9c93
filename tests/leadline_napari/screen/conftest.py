"""One viewer for all tests on the screen: each opens a fresh brain in it, as a person does."""

import pytest


@pytest.fixture(scope="session")
def window():
    """A viewer with its docks."""
    napari = pytest.importorskip("napari")
    pytest.importorskip("pyqtgraph")
    from leadline_napari.workbench import close_workbench, workbench

    viewer = napari.Viewer(show=True)
    viewer.window._qt_window.resize(1280, 800)
    found = workbench(viewer)
    found.show_docks()
    yield found
    close_workbench(viewer)
    viewer.close()


@pytest.fixture
def bench(window, qtbot):
    """The window, with what it says to the user kept in ``told``."""
    from tests.leadline_napari.screen.hands import settle

    window.told = []
    window.failed.connect(window.told.append)
    window.docks["section"].raise_()
    yield window
    window.failed.disconnect(window.told.append)
    settle(window, qtbot)
    if window.viewer.dims.ndisplay == 3:
        window.viewer.dims.ndisplay = 2

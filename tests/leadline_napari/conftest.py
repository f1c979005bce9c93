"""What the plugin's tests share. Those on the screen need a display with OpenGL and are left out, with the reason,
where there is none: run them under ``xvfb-run -a -s "-screen 0 1600x1000x24"``."""

import importlib.util
import os
import shutil
import sys
from pathlib import Path

import pytest

HERE = Path(__file__).parent
NO_SCREEN = ""
if importlib.util.find_spec("napari") is None or importlib.util.find_spec("pyqtgraph") is None:
    NO_SCREEN = "napari or pyqtgraph is not installed: pip install 'leadline[napari]'"
elif sys.platform.startswith("linux") and not os.environ.get("DISPLAY"):
    NO_SCREEN = 'no display: run under xvfb-run -a -s "-screen 0 1600x1000x24"'
elif os.environ.get("QT_QPA_PLATFORM") == "offscreen":
    NO_SCREEN = "QT_QPA_PLATFORM=offscreen has no OpenGL canvas: use xvfb-run instead"


def pytest_collection_modifyitems(items):
    """Leave out what needs a screen where there is none."""
    for item in items:
        if NO_SCREEN and Path(item.fspath).parent == HERE / "screen":
            item.add_marker(pytest.mark.skip(reason=NO_SCREEN))


@pytest.fixture(scope="session")
def finished_once(tmp_path_factory):
    """The tiny brain with every product, made once and never changed."""
    from tests.leadline_napari.finished import write_finished

    return write_finished(tmp_path_factory.mktemp("finished") / "brain")


@pytest.fixture
def finished(finished_once, tmp_path):
    """A copy of the finished tiny brain."""
    return Path(shutil.copytree(finished_once, tmp_path / "brain"))


class AtOnce:
    """A runner that computes where it stands, or keeps work back until it is told to go on."""

    def __init__(self):
        self.kept, self.hold = [], False

    def submit(self, name, compute, done, failed):
        from leadline.base.errors import LeadlineError

        if self.hold:
            self.kept = [k for k in self.kept if k[0] != name] + [(name, compute, done, failed)]
            return
        try:
            found = compute()
        except LeadlineError as error:
            failed(str(error))
        else:
            done(found)

    def go_on(self):
        self.hold = False
        kept, self.kept = self.kept, []
        for work in kept:
            self.submit(*work)


@pytest.fixture
def at_once():
    return AtOnce()

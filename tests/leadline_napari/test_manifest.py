"""What napari and the command line see of the plugin; no screen."""

import ast
import subprocess
import sys
from importlib import import_module
from pathlib import Path

import pytest
from tests.good_brain import write_good_brain

import leadline_napari
from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline_napari.reader import get_reader

HERE = Path(leadline_napari.__file__).parent
npe2 = pytest.importorskip("npe2")


def manifest():
    return npe2.PluginManifest.from_file(HERE / "napari.yaml")


def test_the_manifest_is_valid_and_every_command_is_there():
    found = manifest()
    assert found.name == "leadline"
    for command in found.contributions.commands:
        module, name = command.python_name.split(":")
        tree = ast.parse((HERE / f"{module.rpartition('.')[2]}.py").read_text())
        assert name in {node.name for node in tree.body if isinstance(node, ast.FunctionDef)}, command.id


def test_the_installed_package_names_its_manifest():
    assert npe2.PluginManifest.from_distribution("leadline").name == "leadline"


def test_a_brain_folder_or_its_file_is_read_and_all_else_is_declined_quietly(tmp_path):
    file = write_good_brain(tmp_path / "brain")
    assert get_reader(str(file)) is not None
    assert get_reader(str(file.parent)) is not None
    (tmp_path / "x.tif").write_text("")
    for other in (str(tmp_path), str(tmp_path / "x.tif"), str(tmp_path / "none"), [str(file)]):
        assert get_reader(other) is None


def test_the_package_and_its_controllers_load_no_screen_toolkit():
    names = ["leadline_napari", "leadline_napari.store", "leadline_napari.reader", "leadline_napari.commands"]
    names += [f"leadline_napari.controllers.{p.stem}" for p in (HERE / "controllers").glob("[a-z]*.py")]
    code = f"import sys\nfor n in {names}: __import__(n)\n"
    code += "print([m for m in ('qtpy', 'PyQt6', 'napari', 'pyqtgraph', 'vispy') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    assert done.stdout.strip() == "[]"


@pytest.mark.parametrize("missing", ["napari", "pyqtgraph"])
def test_view_says_what_to_install_where_a_package_is_missing(tmp_path, monkeypatch, missing):
    from leadline.cli.view import view

    file = write_good_brain(tmp_path)
    util = import_module("importlib.util")
    real = util.find_spec
    monkeypatch.setattr(util, "find_spec", lambda name: None if name == missing else real(name))
    with pytest.raises(
        LeadlineError, match=rf"{missing} is not installed\. Install it: pip install 'leadline\[napari\]'"
    ):
        view(file)


def test_view_opens_the_plugin_on_the_brain_that_was_named(tmp_path, monkeypatch):
    from leadline.cli.view import view

    file = write_good_brain(tmp_path)
    seen = []
    monkeypatch.setattr(import_module("leadline_napari.commands"), "show", seen.append)
    view(tmp_path)
    assert seen == [read_brain(file).file]

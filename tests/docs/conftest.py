"""A desk as a user's: two brains, a second reading of one, loose files; and lines typed there."""

import shlex
import shutil

import pytest
from tests.finished_brain import truth_text, write_finished_brain
from tests.made_nwb import write_nwb
from typer.testing import CliRunner

from leadline.cli.main import app


@pytest.fixture(scope="session")
def shelf(tmp_path_factory):
    """A desk with two brains, a second reading of the first, and loose files."""
    folder = tmp_path_factory.mktemp("desk")
    first = write_finished_brain(folder / "kestrel-07", name="kestrel-07")
    write_finished_brain(folder / "kestrel-08", name="kestrel-08")
    write_finished_brain(folder / "kestrel-07-bob", name="kestrel-07", shift_um=60.0)
    write_nwb(folder / "kestrel-07")
    (folder / "truth.csv").write_text(truth_text(first))
    (folder / "cells.csv").write_text("cell,s0_um,s1_um,s2_um\n1,2000,2500,1500\n2,2500,3000,1800\n")
    for name in ("labels.nrrd", "template.nrrd", "structures.csv"):
        shutil.copy(folder / "kestrel-07" / "atlas" / name, folder / name)
    return folder


@pytest.fixture
def desk(shelf, tmp_path, monkeypatch):
    shutil.copytree(shelf, tmp_path / "desk")
    monkeypatch.chdir(tmp_path / "desk")
    return tmp_path / "desk"


@pytest.fixture
def run_line():
    """Types a line, which must end well; returns what it said."""

    def run(line):
        words = shlex.split(line, comments=True)
        assert words[0].split("/")[-1] == "leadline", line
        result = CliRunner().invoke(app, words[1:], catch_exceptions=False)
        assert result.exit_code == 0, f"{line}\n{result.output}"
        return result.output

    return run

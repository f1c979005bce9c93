"""Nothing is written outside the brain's folder, and what is no file is not read as one."""

import json
import os

import pytest
from tests.good_brain import write_good_brain

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.pipeline.record import Record


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    return write_good_brain(tmp_path_factory.mktemp("good")).parent


@pytest.fixture
def brain(made, tmp_path):
    """A brain's folder of links to the files of a good one; its brain.toml is its own."""
    folder = tmp_path / "brain"
    folder.mkdir()
    for path in made.iterdir():
        (folder / path.name).symlink_to(path)
    (folder / "brain.toml").unlink()
    (folder / "brain.toml").write_text((made / "brain.toml").read_text())
    return folder


def change(brain, old, new):
    text = (brain / "brain.toml").read_text()
    assert old in text
    (brain / "brain.toml").write_text(text.replace(old, new))


@pytest.mark.parametrize("name", ["out", ".leadline", "out/registration", ".leadline/spectra"])
def test_a_folder_of_results_that_leads_out_is_refused(brain, tmp_path, name):
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    (brain / name).parent.mkdir(exist_ok=True)
    (brain / name).symlink_to(elsewhere)
    with pytest.raises(LeadlineError, match=r"leads out of the brain's folder, to .*elsewhere"):
        read_brain(brain)
    assert not list(elsewhere.iterdir())


@pytest.mark.parametrize("name", ["out", "out/registration"])
def test_a_link_that_stays_in_the_folder_is_followed(brain, name):
    (brain / "disk").mkdir()
    (brain / name).parent.mkdir(exist_ok=True)
    (brain / name).symlink_to(brain / "disk")
    assert read_brain(brain).out == brain / "out"


@pytest.mark.parametrize("name", ["../x", "/x", "a/b", "..", "", ".hidden", "a\\0b", "x" * 81])
def test_a_name_that_would_be_a_path_is_refused(brain, name):
    change(brain, 'name = "A"', f"name = {json.dumps(name)}")
    with pytest.raises(LeadlineError, match="cannot be a name"):
        read_brain(brain)


def test_what_is_no_file_is_not_waited_for(brain):
    os.mkfifo(brain / "pipe")
    change(brain, '"a_spikes.csv"', '"pipe"')
    change(brain, '"a_events.csv"', '"/dev/zero"')
    with pytest.raises(LeadlineError, match=r"neither a file nor a folder[\s\S]*neither a file nor a folder"):
        read_brain(brain)


@pytest.mark.parametrize("name", ["/etc/passwd", "/dev/zero", "../outside", "x" * 300])
def test_the_record_of_steps_speaks_of_files_in_the_folder_alone(brain, tmp_path, name):
    (tmp_path / "outside").write_text("x")
    done = {"key": "k", "outputs": {name: "f"}, "warnings": [], "inputs": {}, "extra": {}}
    (brain / ".leadline").mkdir()
    (brain / ".leadline" / "steps.json").write_text(json.dumps({"format": 1, "steps": {"register": done}}))
    record = Record(brain, brain / ".leadline")
    assert not record.steps["register"].intact(brain)

"""Locations written into NWB files: exact, matched by identity, whole or not at all."""

import json
import multiprocessing
import os
import signal
import time

import h5py
import numpy as np
import pandas as pd
import pytest
from pynwb import NWBHDF5IO, validate
from tests.finished_brain import write_finished_brain
from tests.made_nwb import ORDER, write_nwb
from typer.testing import CliRunner

from leadline.base.errors import LeadlineError
from leadline.cli.main import app
from leadline.io import export_nwb as module
from leadline.io.export_nwb import Column, write_copy, write_in_place
from leadline.pipeline.export import export_nwb

ELECTRODES = "general/extracellular_ephys/electrodes"


@pytest.fixture(scope="module")
def brain(tmp_path_factory):
    brain = write_finished_brain(tmp_path_factory.mktemp("export"))
    write_nwb(brain.folder)
    return brain


@pytest.fixture
def source(brain, tmp_path):
    path = tmp_path / "in.nwb"
    path.write_bytes((brain.folder / "session.nwb").read_bytes())
    return path


def columns_of(path):
    with NWBHDF5IO(str(path), "r") as io:
        table = io.read().electrodes
        found = {name: list(table[name].data[:]) for name in table.colnames if name != "group"}
        return found, {name: table[name].description for name in table.colnames}


def require_table(path, brain):
    """Every electrode of the file carries its contact's row of the channel table."""
    table = pd.read_csv(brain.out / "channels.csv", keep_default_na=False).set_index("channel").loc[ORDER]
    found, _ = columns_of(path)
    n = len(ORDER)
    assert found["location"][:n] == table["region"].tolist()
    assert found["layer"][:n] == table["layer"].astype(str).tolist()
    assert found["basis"][:n] == table["basis"].tolist()
    for name, column in (("x", "ap_um"), ("y", "dv_um"), ("z", "ml_um"), ("p_region", "p_region"),
                         ("track_depth_sd_um", "track_depth_sd_um")):  # fmt: skip
        assert found[name][:n] == table[column].tolist(), name
    assert found["location"][n:] == ["CA1"] * 3
    assert np.isnan(found["x"][n:]).all()
    return found


def test_the_copy_read_back_equals_the_table(brain, source, tmp_path):
    before = source.read_bytes()
    summary = export_nwb(brain, source, tmp_path / "new" / "out.nwb", groups={})
    require_table(summary.output, brain)
    assert source.read_bytes() == before
    assert summary.matches == ("A: 32 of 32 channels are electrodes of group A, matched by rel_x, rel_y",)
    _, descriptions = columns_of(summary.output)
    for name, way in (("x", "posterior"), ("y", "inferior"), ("z", "right")):
        assert descriptions[name].startswith(
            f"um, growing {way}, in the atlas 'Tiny atlas', from the centre of the first"
        )


def test_everything_else_in_the_copy_is_as_it_was(brain, source, tmp_path):
    export_nwb(brain, source, tmp_path / "out.nwb", groups={})
    with h5py.File(source) as old, h5py.File(tmp_path / "out.nwb") as new:

        def same(name, item):
            if isinstance(item, h5py.Dataset) and not (
                name.startswith(ELECTRODES) or name.startswith("specifications")
            ):
                assert np.array_equal(item[()], new[name][()]), name

        old.visititems(same)


def test_writing_twice_gives_the_same_table(brain, source, tmp_path):
    export_nwb(brain, source, tmp_path / "one.nwb", groups={})
    summary = export_nwb(brain, tmp_path / "one.nwb", tmp_path / "two.nwb", groups={})
    require_table(tmp_path / "two.nwb", brain)
    assert {c.changed for c in summary.changes} == {0}


def test_names_match_where_there_are_no_places(tmp_path):
    brain = write_finished_brain(tmp_path)
    write_nwb(tmp_path, places=False, names="contact_id")
    summary = export_nwb(brain, tmp_path / "session.nwb", tmp_path / "out.nwb", groups={})
    assert summary.matches[0].endswith("matched by contact_id")
    require_table(tmp_path / "out.nwb", brain)


def test_a_group_of_another_name_is_chosen_by_hand(tmp_path):
    brain = write_finished_brain(tmp_path)
    source = write_nwb(tmp_path, group="shank_0")
    with pytest.raises(LeadlineError, match="no electrode group 'A'; groups are 'other', 'shank_0'"):
        export_nwb(brain, source, tmp_path / "out.nwb", groups={})
    export_nwb(brain, source, tmp_path / "out.nwb", groups={"A": ["shank_0"]})
    require_table(tmp_path / "out.nwb", brain)
    with pytest.raises(LeadlineError, match="no penetration 'B'"):
        export_nwb(brain, source, tmp_path / "x.nwb", groups={"B": ["shank_0"]})


def test_a_dry_run_says_what_would_change_and_writes_nothing(brain, source, tmp_path):
    words = ["export", str(brain.file), "--to", "nwb", "--source", str(source), "-o", str(tmp_path / "out.nwb")]
    before = sorted(p.name for p in tmp_path.iterdir())
    result = CliRunner().invoke(app, [*words, "--dry-run"], catch_exceptions=False)
    assert "location: would change, 32 electrodes; first 'root' -> 'DGY'" in result.stdout
    assert "layer: new, 32 electrodes" in result.stdout
    assert result.stdout.endswith("nothing was written\n")
    assert sorted(p.name for p in tmp_path.iterdir()) == before
    said = json.loads(CliRunner().invoke(app, [*words, "--json"], catch_exceptions=False).stdout)
    assert said["written"] is True
    assert said["changes"][0] == {"column": "location", "new": False, "electrodes": 32, "example": "'root' -> 'DGY'"}


def test_in_place_leaves_no_backup_behind(brain, source):
    export_nwb(brain, source, None, groups={}, in_place=True)
    require_table(source, brain)
    assert [p.name for p in source.parent.iterdir()] == ["in.nwb"]


def test_in_place_through_a_link_changes_the_file_and_keeps_the_link(brain, source, tmp_path):
    (tmp_path / "there").mkdir()
    link = tmp_path / "there" / "link.nwb"
    link.symlink_to(source)
    export_nwb(brain, link, None, groups={}, in_place=True)
    assert link.is_symlink()
    require_table(source, brain)


def test_in_place_puts_the_old_file_back_when_the_new_one_is_wrong(brain, source, monkeypatch):
    before = source.read_bytes()
    calls = []

    def wrong_the_second_time(path, rows, columns):
        calls.append(path)
        if len(calls) == 2:
            raise LeadlineError("did not come back")

    monkeypatch.setattr(module, "_require_written", wrong_the_second_time)
    with pytest.raises(LeadlineError, match="did not come back"):
        export_nwb(brain, source, None, groups={}, in_place=True)
    assert len(calls) == 2
    assert source.read_bytes() == before
    assert [p.name for p in source.parent.iterdir()] == ["in.nwb"]


def test_a_copy_that_would_not_be_valid_is_refused(brain, source, tmp_path, monkeypatch):
    monkeypatch.setattr(module, "_complaints", lambda path: [] if path == source else ["x is wrong"])
    with pytest.raises(LeadlineError, match="would not be valid NWB: x is wrong"):
        export_nwb(brain, source, tmp_path / "out.nwb", groups={})
    assert [p.name for p in tmp_path.iterdir()] == ["in.nwb"]


def fixed_length_text(handle):
    table = handle[ELECTRODES]
    attributes = dict(table["location"].attrs)
    del table["location"]
    table.create_dataset("location", data=np.array([b"root"] * 35, "S4")).attrs.update(attributes)


def external_link(handle):
    handle["acquisition/elsewhere"] = h5py.ExternalLink("raw.nwb", "/acquisition/raw")


def numbers_for_layers(handle):
    table = handle[ELECTRODES]
    table.create_dataset("layer", data=np.zeros(35)).attrs.update(dict(table["rel_x"].attrs))


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (fixed_length_text, r"column 'location' holds text of a fixed length \(4 bytes\)"),
        (external_link, "'/acquisition/elsewhere' is kept in another file"),
        (numbers_for_layers, "column 'layer' holds float64, Leadline writes text there"),
        (lambda h: h[ELECTRODES.rsplit("/", 1)[0]].pop("electrodes"), "has no electrode table"),
        (lambda h: h.attrs.pop("nwb_version"), "is HDF5, but no NWB file"),
        (lambda h: h[ELECTRODES].pop("group"), "cannot be read as NWB"),
    ],
)
def test_what_is_not_safe_is_refused_and_nothing_is_left(brain, source, tmp_path, spoil, words):
    with h5py.File(source, "r+") as handle:
        spoil(handle)
    before = source.read_bytes()
    for output in (tmp_path / "out.nwb", None):
        with pytest.raises(LeadlineError, match=words):
            export_nwb(brain, source, output, groups={}, in_place=output is None)
    assert source.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["in.nwb"]


def test_a_file_open_elsewhere_is_left_alone(brain, source, tmp_path):
    with h5py.File(source, "r"):
        with pytest.raises(LeadlineError, match="another program has this file open"):
            export_nwb(brain, source, None, groups={}, in_place=True)
        export_nwb(brain, source, tmp_path / "out.nwb", groups={})  # reading does no harm to a copy
    with h5py.File(source, "r+"), pytest.raises(LeadlineError, match="another program has this file open"):
        export_nwb(brain, source, tmp_path / "out2.nwb", groups={})
    assert sorted(p.name for p in tmp_path.iterdir()) == ["in.nwb", "out.nwb"]


def test_what_is_there_is_never_written_over(brain, source, tmp_path):
    with pytest.raises(LeadlineError, match=r"is there already. Say --in-place"):
        export_nwb(brain, source, source, groups={})
    (tmp_path / "out.nwb").write_text("mine")
    with pytest.raises(LeadlineError, match="is there already"):
        export_nwb(brain, source, tmp_path / "out.nwb", groups={})
    (tmp_path / "in.nwb.backup").write_text("mine")
    with pytest.raises(LeadlineError, match="a backup of an earlier export"):
        export_nwb(brain, source, None, groups={}, in_place=True)
    with pytest.raises(LeadlineError, match="say either --output"):
        export_nwb(brain, source, None, groups={})


def _endless_export(source, output):
    """Writes the same columns again and again, to be killed at any moment."""
    columns = {"location": Column("place", np.array(["VIP1"] * 35, dtype=object)), "x": Column("x", np.arange(35.0))}
    while True:
        if output is None:
            write_in_place(source, np.arange(35), columns)
        else:
            write_copy(source, output, np.arange(35), columns)
            output.unlink()


@pytest.mark.parametrize("in_place", [False, True])
def test_a_kill_at_any_moment_leaves_whole_files(source, tmp_path, in_place):
    before = source.read_bytes()
    rng = np.random.default_rng(3)
    output = None if in_place else tmp_path / "out.nwb"
    context = multiprocessing.get_context("spawn")
    for pause in rng.uniform(2.0, 3.5, 3):
        for stray in (tmp_path / "in.nwb.backup", tmp_path / "out.nwb"):
            stray.unlink(missing_ok=True)
        worker = context.Process(target=_endless_export, args=(source, output), daemon=True)
        worker.start()
        time.sleep(float(pause))
        os.kill(worker.pid, signal.SIGKILL)
        worker.join()
        if not in_place:
            assert source.read_bytes() == before
        for path in (source, tmp_path / "out.nwb", tmp_path / "in.nwb.backup"):
            if path.exists():
                assert validate(path=str(path)) == []

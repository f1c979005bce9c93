"""Edits on disk, undo after a restart, and kills at any moment."""

import json
import os
import random
import signal
import subprocess
import sys
import time
from dataclasses import replace

import pytest

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.io.tables import read_anchors
from leadline.model.anchor import Anchor
from leadline.pipeline.lock import sole_worker
from leadline_napari.controllers.desk import Desk
from leadline_napari.session import AddAnchor, ChangeAnchor, DeleteAnchor, DrawTrack, Pair, SetPairs, TrackEdit
from leadline_napari.store import ChangedOutside

UPPER, LOWER = Anchor("A", 0, 3000.0, 0.1 + 0.2), Anchor("A", 0, 500.0, 2800.0)
BRAIN = """
[brain]
name = "small"
[atlas]
path = "."
[stack]
background = "stack.tif"
[[penetration]]
name = "A"
probe = "probe.json"
"""


@pytest.fixture
def folder(tmp_path):
    for name in ("stack.tif", "probe.json"):
        (tmp_path / name).write_text("")
    (tmp_path / "brain.toml").write_text(BRAIN)
    return tmp_path


def desk(folder):
    return Desk(read_brain(folder))


def test_an_edit_is_on_disk_when_it_has_been_made_and_an_undo_too(folder):
    here = desk(folder)
    here.act(AddAnchor(UPPER))
    assert read_anchors(folder / "out" / "anchors.csv") == (UPPER,)
    here.undo()
    assert read_anchors(folder / "out" / "anchors.csv") == ()
    here.redo()
    assert read_anchors(folder / "out" / "anchors.csv") == (UPPER,)


def test_undo_and_redo_go_on_after_a_restart(folder):
    here = desk(folder)
    here.act(AddAnchor(UPPER))
    here.act(AddAnchor(LOWER))
    here.act(ChangeAnchor(LOWER, replace(LOWER, track_depth_um=2900.5)))
    here.undo()
    again = desk(folder)
    assert again.history == here.history
    again.redo()
    assert again.session.edits.anchors[1].track_depth_um == 2900.5
    for _ in range(5):
        again.undo()
    assert desk(folder).session.edits.anchors == ()


def test_tracks_and_pairs_have_files_only_while_there_are_any(folder):
    here = desk(folder)
    here.act(DrawTrack(TrackEdit("A", 0, ((1.0, 2, 3), (1.0, 900, 3)))))
    here.act(SetPairs((Pair((1.0, 2, 3), (4.0, 5, 6)),)))
    assert desk(folder).session.edits == here.session.edits
    here.undo()
    here.undo()
    assert not (folder / "track_edits.csv").exists()
    assert not (folder / "registration_pairs.csv").exists()


def test_what_another_program_did_is_taken_over_as_one_more_step(folder):
    here = desk(folder)
    here.act(AddAnchor(UPPER))
    other = desk(folder)
    other.act(DeleteAnchor(UPPER))
    with pytest.raises(ChangedOutside, match="your last edit was not made"):
        here.act(AddAnchor(LOWER))
    assert here.session.edits.anchors == ()
    here.act(AddAnchor(LOWER))
    assert desk(folder).session.edits.anchors == (LOWER,)
    (folder / "out" / "anchors.csv").unlink()
    late = desk(folder)
    assert late.session.edits.anchors == ()
    late.undo()
    assert late.session.edits.anchors == (LOWER,)
    assert desk(folder).history == late.history


def test_while_a_run_holds_the_brain_no_edit_is_made_and_it_says_so(folder):
    here = desk(folder)
    with (
        sole_worker(folder / "brain.toml"),
        pytest.raises(LeadlineError, match="another Leadline process is working on this brain"),
    ):
        here.act(AddAnchor(UPPER))
    assert here.session.edits.anchors == ()
    assert not here.can_undo


def test_listeners_hear_of_changes_and_of_nothing_else(folder):
    here, heard = desk(folder), []
    here.listen(lambda before, after: heard.append((len(before.edits.anchors), len(after.edits.anchors))))
    here.act(AddAnchor(UPPER))
    here.redo()
    here.undo()
    here.undo()
    assert heard == [(0, 1), (1, 0)]


def test_a_damaged_journal_is_told_in_words(folder):
    desk(folder).act(AddAnchor(UPPER))
    journal = folder / ".leadline" / "history.jsonl"
    journal.write_text("nonsense\n" + journal.read_text())
    with pytest.raises(LeadlineError, match="only undo is lost, no anchor"):
        desk(folder)


EDITOR = """
import random, sys
from leadline.io.brainfile import read_brain
from leadline.model.anchor import Anchor
from leadline_napari.controllers.desk import Desk
from leadline_napari.session import AddAnchor, DeleteAnchor
from leadline_napari.history import line_of
desk = Desk(read_brain(sys.argv[1]))
rng = random.Random(int(sys.argv[2]))
while True:
    anchors = desk.session.edits.anchors
    move = rng.random()
    if move < 0.2 and desk.can_undo: desk.undo()
    elif move < 0.3 and desk.can_redo: desk.redo()
    elif move < 0.5 and anchors: desk.act(DeleteAnchor(rng.choice(anchors)))
    else:
        tip = 5000.0 * rng.random()
        desk.act(AddAnchor(Anchor("A", 0, tip, 6000.0 - tip)))
    print(line_of(desk.session.edits), flush=True)
"""


@pytest.mark.slow
def test_thirty_kills_at_random_moments_lose_no_accepted_edit(folder):
    rng = random.Random(11)
    for kill in range(30):
        process = subprocess.Popen(
            [sys.executable, "-c", EDITOR, str(folder), str(kill)], stdout=subprocess.PIPE, text=True
        )
        first = process.stdout.readline()
        time.sleep(rng.uniform(0.0, 0.12))
        os.kill(process.pid, signal.SIGKILL)
        told = [first, *process.stdout.readlines()]
        process.wait()
        whole = [line for line in told if line.endswith("\n")]
        accepted = json.loads(whole[-1])["do"]["anchors"]
        found = desk(folder)
        keep = [json.loads(line_now(e))["do"]["anchors"] for e in (found.history.now, *found.history.past[-1:])]
        undone = [json.loads(line_now(e))["do"]["anchors"] for e in found.history.future[-1:]]
        assert accepted in [*keep, *undone], f"kill {kill}"
    assert not list((folder / "out").glob(".part-*")) or desk(folder).act(AddAnchor(UPPER)) is None


def line_now(edits):
    from leadline_napari.history import line_of

    return line_of(edits)

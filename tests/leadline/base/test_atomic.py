"""Whole files on bad days: writers that were killed, clocks that were set, disks that are full or closed."""

import errno
import os
import signal
import time

import pytest
from tests.faults.killing import in_child, killed_at

from leadline.base.atomic import PART, sweep, whole_file, whole_folder, write_text
from leadline.base.errors import LeadlineError

DAYS_S = 2 * 86400.0


def names(folder):
    return sorted(p.name for p in folder.iterdir())


def die_writing(path):
    with whole_file(path) as part:
        part.write_text("half")
        os.kill(os.getpid(), signal.SIGKILL)


def test_what_a_killed_writer_left_is_cleared_by_the_next_one_at_once(tmp_path):
    path = tmp_path / "a.csv"
    in_child(lambda: die_writing(path))
    assert [n.startswith(PART) for n in names(tmp_path)] == [True]
    write_text(path, "whole")
    assert names(tmp_path) == ["a.csv"]


def test_a_sweep_leaves_the_parts_of_writers_that_live(tmp_path):
    in_child(lambda: die_writing(tmp_path / "dead.csv"))
    with whole_file(tmp_path / "alive.csv") as part:
        part.write_text("x")
        sweep(tmp_path)
        assert names(tmp_path) == [part.name]


@pytest.mark.parametrize("age_s", [DAYS_S, -DAYS_S])
def test_a_part_of_another_machine_is_left_for_a_day_whatever_the_clock_says(tmp_path, age_s):
    for name, age in ((".part-cafe0000-1-old-a.csv", age_s), (".part-cafe0000-1-new-a.csv", 0), ("a.csv", age_s)):
        (tmp_path / name).write_text("x")
        os.utime(tmp_path / name, (time.time() - age,) * 2)
    sweep(tmp_path)
    assert names(tmp_path) == [".part-cafe0000-1-new-a.csv", "a.csv"]


def replace(folder):
    with whole_folder(folder) as part:
        (part / "new").write_text("new")


@pytest.mark.parametrize("how", ["one step", "two steps"])
def test_a_folder_replaced_by_a_killed_writer_is_the_old_or_the_new_one(tmp_path, how, monkeypatch):
    if how == "two steps":
        monkeypatch.setattr("ctypes.CDLL", lambda *_: object())
    missing = 0
    for moment in range(1, 60):
        folder = tmp_path / str(moment) / "atlas"
        folder.mkdir(parents=True)
        (folder / "old").write_text("old")
        ended = killed_at(moment, lambda folder=folder: replace(folder))
        if folder.exists():
            assert names(folder) in (["old"], ["new"])
        else:
            missing += 1
            with pytest.raises(RuntimeError, match="half way"), whole_folder(folder):
                raise RuntimeError("half way")
            assert names(folder) == ["old"]
        replace(folder)
        assert names(folder) == ["new"]
        assert names(folder.parent) == ["atlas"]
        if ended:
            break
    assert ended
    assert moment > 8
    assert missing == (1 if how == "two steps" else 0)


@pytest.mark.parametrize(
    ("code", "words"),
    [
        (errno.ENOSPC, "the disk is full. Free some space"),
        (errno.EROFS, "can only be read. Copy the folder"),
        (errno.EACCES, "may not be written. Copy the folder"),
    ],
)
def test_what_keeps_a_file_from_being_written_is_said_in_words(tmp_path, code, words):
    write_text(tmp_path / "a.csv", "old")
    with pytest.raises(LeadlineError, match=rf"a\.csv: .*{words}"), whole_file(tmp_path / "a.csv"):
        raise OSError(code, os.strerror(code))
    assert (tmp_path / "a.csv").read_text() == "old"
    assert names(tmp_path) == ["a.csv"]


def test_an_error_about_another_file_passes_as_it_is(tmp_path):
    with pytest.raises(PermissionError), whole_file(tmp_path / "copy"):
        raise PermissionError(errno.EACCES, "no", str(tmp_path / "source"))


def test_a_name_that_a_disk_cannot_hold_is_said_in_words(tmp_path):
    with pytest.raises(LeadlineError, match="too long"), whole_file(tmp_path / ("a" * 300)):
        pass
    assert names(tmp_path) == []

"""Errors, whole files and fingerprints."""

import os
import signal
import subprocess
import sys
import time

import numpy as np
import pytest

from leadline.base.arrays import frozen_points
from leadline.base.atomic import whole_file, whole_folder, write_text
from leadline.base.errors import Faults, LeadlineError, nearest
from leadline.base.fingerprint import WHOLE_BELOW_BYTES, fingerprint_path, fingerprint_value


def test_an_error_says_what_where_and_how_to_mend():
    error = LeadlineError("voxel size is missing", where="stack.tif", mend="Write voxel_um = [8, 4, 4]")
    assert str(error) == "stack.tif: voxel size is missing. Write voxel_um = [8, 4, 4]"


def test_faults_tells_every_fault():
    text = str(Faults([LeadlineError("a"), LeadlineError("b", where="c")]))
    assert text == "a\nc: b"


def test_nearest_names_the_word_that_was_meant():
    assert nearest("shank_towards", ["shank_toward", "points"]) == "Did you mean 'shank_toward'?"


def test_points_name_the_row_that_is_not_finite():
    with pytest.raises(LeadlineError, match=r"where: row 1 is not finite"):
        frozen_points([[0, 0, 0], [0, np.nan, 0]], "where")


def test_frozen_points_cannot_be_changed():
    points = frozen_points([[0, 0, 0]], "p")
    with pytest.raises(ValueError, match="read-only"):
        points[0, 0] = 1.0


def test_a_failed_write_leaves_the_old_file_and_nothing_beside_it(tmp_path):
    path = tmp_path / "a.txt"
    write_text(path, "old")

    def fail_half_way():
        with whole_file(path) as part:
            part.write_text("half")
            raise RuntimeError

    with pytest.raises(RuntimeError):
        fail_half_way()
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["a.txt"]


def test_a_folder_takes_the_place_of_the_old_one_as_a_whole(tmp_path):
    for content in ("one", "two"):
        with whole_folder(tmp_path / "f") as part:
            (part / content).write_text(content)
    assert [p.name for p in (tmp_path / "f").iterdir()] == ["two"]
    assert [p.name for p in tmp_path.iterdir()] == ["f"]


def test_writing_the_same_text_does_not_touch_the_file(tmp_path):
    path = tmp_path / "a.txt"
    write_text(path, "same")
    before = path.stat().st_mtime_ns
    time.sleep(0.01)
    write_text(path, "same")
    assert path.stat().st_mtime_ns == before


WRITER = """
import sys
from pathlib import Path
from leadline.base.atomic import write_text
n = 0
while True:
    n += 1
    write_text(Path(sys.argv[1]), (str(n % 10) * 200_000))
"""


def test_a_killed_writer_never_leaves_half_a_file(tmp_path):
    path = tmp_path / "a.txt"
    for pause in np.linspace(0.15, 0.4, 6):
        writer = subprocess.Popen([sys.executable, "-c", WRITER, str(path)])
        time.sleep(float(pause))
        os.kill(writer.pid, signal.SIGKILL)
        writer.wait()
        if path.exists():
            text = path.read_text()
            assert len(text) == 200_000
            assert len(set(text)) == 1


@pytest.mark.parametrize("size", [1000, WHOLE_BELOW_BYTES + 10**6])
def test_a_fingerprint_follows_content(tmp_path, size):
    path = tmp_path / "a.bin"
    path.write_bytes(bytes(size))
    before = fingerprint_path(path)
    assert fingerprint_path(path) == before
    with path.open("r+b") as handle:
        handle.seek(size - 1)
        handle.write(b"x")
    assert fingerprint_path(path) != before


def test_a_folder_fingerprint_sees_a_new_name(tmp_path):
    (tmp_path / "f").mkdir()
    (tmp_path / "f" / "a").write_text("a")
    before = fingerprint_path(tmp_path / "f")
    (tmp_path / "f" / "a").rename(tmp_path / "f" / "b")
    assert fingerprint_path(tmp_path / "f") != before


def test_the_date_of_a_small_folder_does_not_matter(tmp_path):
    (tmp_path / "f").mkdir()
    (tmp_path / "f" / "a").write_text("a")
    before = fingerprint_path(tmp_path / "f")
    os.utime(tmp_path / "f" / "a", (0, 0))
    assert fingerprint_path(tmp_path / "f") == before
    (tmp_path / "f" / "a").write_text("b")
    assert fingerprint_path(tmp_path / "f") != before


def test_value_fingerprints_tell_nested_values_apart():
    values = [[1, [2]], [[1], 2], {"a": 1}, {"a": "1"}, np.arange(3), np.arange(3.0), None, "None"]
    assert len({fingerprint_value(v) for v in values}) == len(values)

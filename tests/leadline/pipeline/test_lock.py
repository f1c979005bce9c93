"""One worker to a brain: who holds it is told, a dead owner is no obstacle, a living one is."""

import json
import os
import signal
import subprocess
import sys
import time

import pytest

from leadline.base.errors import LeadlineError
from leadline.pipeline.lock import LOCK, sole_worker

HOLDER = """
import sys, time
from pathlib import Path
from leadline.pipeline.lock import sole_worker
with sole_worker(Path(sys.argv[1])):
    print("held", flush=True)
    time.sleep(60)
"""


@pytest.fixture
def brain(tmp_path):
    file = tmp_path / "brain.toml"
    file.write_text("format = 1")
    return file


@pytest.fixture
def holder(brain):
    process = subprocess.Popen([sys.executable, "-c", HOLDER, brain], stdout=subprocess.PIPE, text=True)
    assert process.stdout.readline() == "held\n"
    yield process
    process.kill()
    process.wait()


def take(brain):
    with sole_worker(brain):
        return json.loads((brain.parent / LOCK).read_text())


def names(brain):
    return sorted(p.name for p in brain.parent.rglob("*"))


def test_a_second_worker_is_told_who_holds_the_brain_and_since_when(brain, holder):
    with pytest.raises(LeadlineError) as caught:
        take(brain)
    said = str(caught.value)
    assert f"on {os.uname().nodename}, process {holder.pid}, since {time.strftime('%Y-%m-%d')}" in said
    assert "less than a minute" in said
    assert "Wait until it has ended" in said


def test_the_lock_of_a_killed_worker_is_taken_over(brain, holder):
    os.kill(holder.pid, signal.SIGKILL)
    holder.wait()
    assert (brain.parent / LOCK).is_file()
    assert take(brain)["pid"] == os.getpid()
    assert names(brain) == ["brain.toml"]


@pytest.mark.parametrize("lost", ["brain.toml", LOCK])
def test_neither_an_editor_nor_a_hand_lets_a_second_worker_in(brain, holder, lost):
    path = brain.parent / lost
    text = path.read_text()
    path.unlink()
    if lost == "brain.toml":
        path.write_text(text)
    with pytest.raises(LeadlineError, match="another Leadline process"):
        take(brain)


def test_a_lock_left_by_another_machine_is_not_taken_but_told_with_its_age(brain):
    lock = brain.parent / LOCK
    lock.parent.mkdir()
    owner = {"user": "ada", "host": "elsewhere-9", "pid": 12, "since_s": time.time() - 3 * 3600 - 60}
    lock.write_text(json.dumps(owner))
    with pytest.raises(LeadlineError, match=r"ada on elsewhere-9, process 12, since .* \(3 h\).*delete .*lock"):
        take(brain)
    lock.write_text(json.dumps({**owner, "since_s": time.time() + 3600}))
    with pytest.raises(LeadlineError, match=r"since [0-9: -]+\. Wait"):
        take(brain)
    lock.unlink()
    assert take(brain)["host"] == os.uname().nodename


@pytest.mark.parametrize("content", [b"", b"{", b"\xff\x00", b"[1]", b'{"user": 1}', b"9" * 5000])
def test_a_lock_that_says_nothing_is_taken(brain, content):
    (brain.parent / ".leadline").mkdir()
    (brain.parent / LOCK).write_bytes(content)
    assert take(brain)["pid"] == os.getpid()


def test_a_lock_that_is_a_link_is_not_followed(brain, tmp_path):
    target = tmp_path / "precious"
    target.write_text("mine")
    (brain.parent / ".leadline").mkdir()
    (brain.parent / LOCK).symlink_to(target)
    with pytest.raises(LeadlineError, match="cannot be made"):
        take(brain)
    assert target.read_text() == "mine"


def test_an_error_inside_lets_go(brain):
    with pytest.raises(RuntimeError), sole_worker(brain):
        raise RuntimeError
    assert take(brain)["pid"] == os.getpid()
    assert names(brain) == ["brain.toml"]

"""Many brains side by side: found, run each in its own process, stopped in order."""

import io
import json
import sys

import pytest
from tests.finished_brain import write_finished_brain
from tests.leadline.cli.test_main import leadline

from leadline.base.errors import LeadlineError
from leadline.pipeline import alone, many
from leadline.pipeline.alone import run_alone


@pytest.fixture(scope="module")
def shelf(tmp_path_factory):
    """Two finished brains, one that is wrong, and a folder that is none."""
    folder = tmp_path_factory.mktemp("shelf")
    for name in ("finch", "heron"):
        write_finished_brain(folder / name, name=name)
    (folder / "owl").mkdir()
    (folder / "owl" / "brain.toml").write_text("format = 1\noops = 2\n")
    (folder / "notes").mkdir()
    return folder


def files(*paths):
    return tuple(str(path / "brain.toml") for path in paths)


def test_a_pattern_finds_files_and_folders_each_once_in_order_of_names(shelf):
    both = files(shelf / "finch", shelf / "heron")
    assert many.find_brains([str(shelf / "*")]) == (*both, *files(shelf / "owl"))
    assert many.find_brains([str(shelf / "[fh]*/brain.toml")]) == both
    assert many.find_brains([str(shelf / "heron"), f"{shelf}/**/brain.toml"])[:2] == both[::-1]


def test_a_path_that_is_wrong_stands_and_a_pattern_that_matches_nothing_is_an_error(shelf):
    assert many.find_brains([str(shelf / "none")]) == (str(shelf / "none"),)
    with pytest.raises(LeadlineError, match=r"notes.*matches no brain"):
        many.find_brains([str(shelf / "notes" / "*")])


def test_as_many_workers_as_brains_processors_and_memory_allow(monkeypatch):
    monkeypatch.setattr(many, "cores", lambda: 8)
    monkeypatch.setattr(many.os, "sysconf", lambda name: {"SC_PAGE_SIZE": 1e6, "SC_PHYS_PAGES": 16e3}[name])
    assert [many.usual_workers(n) for n in (1, 3, 100)] == [1, 3, 5]


def test_one_brains_failure_stops_no_other_and_the_exit_code_says_so(shelf):
    told = leadline("run", shelf / "*", "--workers", "3", "--json")
    assert told.returncode == 2
    assert "Traceback" not in told.stderr
    assert "oops" in told.stderr
    brains = json.loads(told.stdout)["brains"]
    assert [(b["brain"], b["state"]) for b in brains] == [("finch", "done"), ("heron", "done"), ("owl", "wrong")]
    alone_told = json.loads(leadline("run", shelf / "finch", "--json").stdout)
    assert {key: brains[0][key] for key in alone_told} == alone_told


def test_a_table_says_how_each_went(shelf):
    told = leadline("run", shelf / "f*", shelf / "owl")
    assert told.returncode == 2
    finch, owl = (next(line for line in told.stdout.splitlines() if name in line) for name in ("finch", "owl"))
    assert finch.split()[:3] == ["finch", "none", "all"]
    assert finch.split()[-1] == "done"
    assert " 32 " in finch
    assert "wrong: " in owl


def test_a_brain_is_stopped_when_whoever_started_it_is_gone(shelf):
    heard = []
    with many.stopping_pipe() as (stop, end):
        end()
        outcome = run_alone(
            str(shelf / "finch" / "brain.toml"), physiology=True, threads=1, stop=stop, watch=heard.append
        )
    assert outcome.state == "stopped"
    assert outcome.channels == 0


def test_after_ctrl_c_all_are_told_to_end_and_waited_for():
    ended = []

    class Task:
        def __init__(self, file):
            self.file = file

        def exception(self):
            return None

        def result(self):
            return alone.Outcome(self.file, "stopped" if ended else "done")

    def one_and_then_ctrl_c(tasks):
        for task in tasks:
            yield task
            if not ended:
                raise KeyboardInterrupt

    heard = []
    tasks = {Task(name): name for name in "abc"}
    found = many.gathered(tasks, one_and_then_ctrl_c, lambda: ended.append(1), lambda file, _event: heard.append(file))
    assert [(o.file, o.state) for o in found] == [("a", "done"), ("b", "stopped"), ("c", "stopped")]
    assert ended == [1]
    assert heard == ["a", "b", "c"]


def test_a_future_that_was_lost_is_a_failed_brain():
    class Lost:
        def exception(self):
            return OSError("the worker is gone")

    heard = []
    (found,) = many.gathered({Lost(): "a"}, list, lambda: None, lambda file, event: heard.append((file, event)))
    assert (found.state, found.error) == ("failed", "OSError: the worker is gone")
    assert heard == [("a", {"outcome": found})]


@pytest.mark.parametrize(
    ("ending", "code", "said", "state", "error", "details"),
    [
        ({"state": "done", "told": {"brain": "finch"}}, 0, "", "done", "", ""),
        ({}, -9, "", "failed", "memory ran out", ""),
        ({}, -2, "", "stopped", "kept", ""),
        ({}, 3, "no module", "failed", "code 3", "no module"),
        ({"state": "failed", "error": "ValueError: x"}, 1, "Traceback: x", "failed", "ValueError", "Traceback: x"),
        ({"state": "failed", "error": "disk full"}, 1, "a warning", "failed", "disk full", ""),
    ],
)
def test_how_a_child_ended_is_put_in_words(ending, code, said, state, error, details):
    found = alone._outcome("shelf/finch/brain.toml", "finch", 1.0, ending, code, said)
    assert (found.state, found.details, found.name) == (state, details, "finch")
    assert error in found.error


@pytest.mark.parametrize(
    ("error", "state", "words", "whole"),
    [
        (LeadlineError("is wrong", where="a.csv"), "wrong", "a.csv: is wrong", False),
        (KeyboardInterrupt(), "stopped", "kept", False),
        (OSError(28, "No space left on device", "out/a"), "failed", "No space left on device: out/a", False),
        (ZeroDivisionError("by zero\nmore"), "failed", "ZeroDivisionError: by zero", True),
    ],
)
def test_only_a_fault_of_our_own_is_shown_whole(error, state, words, whole, capsys):
    lines = io.StringIO()
    alone._end(alone._Telling(lines), type(error), error, None)
    ending = json.loads(lines.getvalue())["ending"]
    assert (ending["state"], words in ending["error"]) == (state, True)
    assert ("by zero" in capsys.readouterr().err) is whole


def test_threads_are_capped_and_a_lower_cap_of_the_users_stands(monkeypatch):
    seen = {}

    class Child:
        stdout = ()

        def __init__(self, command, env, **_):
            seen.update(env=env, command=command)

        def wait(self):
            return 0

    monkeypatch.setattr(alone.subprocess, "Popen", Child)
    monkeypatch.setenv("OMP_NUM_THREADS", "1")
    monkeypatch.delenv("NUMBA_NUM_THREADS", raising=False)
    run_alone("a/brain.toml", physiology=False, threads=4, stop=0, watch=print)
    assert seen["env"]["OMP_NUM_THREADS"] == "1"
    assert seen["env"]["NUMBA_NUM_THREADS"] == "4"
    assert seen["command"][-2:] == ["a/brain.toml", "--no-physiology"]
    assert seen["command"][0] == sys.executable

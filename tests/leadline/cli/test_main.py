"""The command line from outside: exit codes, messages, speed of the first answer."""

import json
import subprocess
import sys

import pytest

LEADLINE = [sys.executable, "-c", "from leadline.cli.main import main; main()"]


def leadline(*words):
    return subprocess.run([*LEADLINE, *map(str, words)], capture_output=True, text=True, check=False)


def test_help_names_every_command():
    told = leadline("--help")
    assert told.returncode == 0
    for command in ("demo", "check", "run", "register", "trace", "profile", "anchor", "locate", "map", "atlas"):
        assert command in told.stdout


def test_help_loads_nothing_heavy():
    heavy = ("scipy", "pandas", "SimpleITK", "skimage", "matplotlib", "numba")
    code = f"import sys, leadline.cli.main; print([m for m in {heavy} if m in sys.modules])"
    told = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert told.stdout.strip() == "[]"


def test_a_missing_brain_is_exit_2_with_one_message(tmp_path):
    told = leadline("run", tmp_path)
    assert told.returncode == 2
    assert told.stderr.count("\n") == 1
    assert "Name a brain.toml or the folder that holds it" in told.stderr
    assert list(tmp_path.iterdir()) == []


def test_an_unknown_command_is_exit_2():
    assert leadline("rnu").returncode == 2


def test_check_says_everything_at_once_and_as_json(tmp_path):
    (tmp_path / "brain.toml").write_text('[brain]\nname = "../x"\n[stack]\nbackground = "no.nrrd"\n')
    told = leadline("check", tmp_path)
    assert told.returncode == 2
    for words in ("cannot be a name", "no.nrrd does not exist", "table [atlas] is missing", "no penetration"):
        assert words in told.stderr


@pytest.mark.parametrize("command", ["check", "run"])
def test_a_fault_is_never_a_traceback(tmp_path, command):
    (tmp_path / "brain.toml").write_bytes(b"\xff\xfe\x00")
    told = leadline(command, tmp_path)
    assert told.returncode == 2
    assert "Traceback" not in told.stderr
    assert "not UTF-8" in told.stderr


def test_json_is_json(tmp_path):
    from tests.good_brain import write_good_brain

    write_good_brain(tmp_path)
    told = leadline("check", tmp_path, "--json")
    assert told.returncode == 0, told.stderr
    assert json.loads(told.stdout)["faults"] == []

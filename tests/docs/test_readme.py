"""The README does what it says: its first brain line by line, and every command and option that it names."""

import re
import shutil
from pathlib import Path

import pandas as pd
import pytest
from tests.finished_brain import write_finished_brain
from tests.good_brain import write_good_brain
from typer.main import get_command

from leadline.cli.main import app
from leadline.demo import run as demo_run
from leadline.demo.recipe import Recipe, small

README = (Path(__file__).parents[2] / "README.md").read_text()
ROWS = re.findall(r"^\| `leadline ([^`]+)` \| (.*) \|$", README, re.MULTILINE)
FIRST = README.split("## A first brain of your own")[1].split("\n## ")[0]
# The example's numbers are a usual recording's; the tiny brain's are others.
NUMBERS = (
    ('"PIR"', '"SAL"'),
    ("175.0", "100.0"),
    ("n_channels = 384", "n_channels = 33, skip_channels = [32]"),
    ("4.69", "0.5"),
)
LINES = {
    "atlas import": ["atlas import labels.nrrd template.nrrd structures.csv new-atlas --name 'my atlas' --licence CC0"],
    "atlas check": ["atlas check kestrel-07/atlas"],
    "check": ["check kestrel-07 --json"],
    "ingest": ["ingest kestrel-07 --keep-full"],
    "run": ["run kestrel-07", "run kestrel-07 -q"],
    "register": ["register kestrel-07"],
    "trace": ["trace kestrel-07"],
    "profile": ["profile kestrel-07"],
    "anchor": ["anchor kestrel-07", "anchor kestrel-07 --accept 1"],
    "locate": ["locate kestrel-07 -v"],
    "map": ["map kestrel-07 cells.csv --to atlas", "map kestrel-07 cells.csv --to atlas -o there.csv"],
    "units": ["units kestrel-07 --value latency_ms"],
    "report": ["report kestrel-07 --figures"],
    "export": [
        "export kestrel-07 --to nwb --source kestrel-07/session.nwb --output out.nwb --dry-run",
        "export kestrel-07 --to nwb --source kestrel-07/session.nwb --in-place --group A=A",
        "export kestrel-07 --to probeinterface",
        "export kestrel-07 --to bids",
    ],
    "compare": ["compare kestrel-07 kestrel-07-bob --truth truth.csv"],
}
ELSEWHERE = {"demo", "learn", "view"}  # demo and learn below; view opens a window: tests/leadline_napari/screen


def named():
    """(command, options named) of every row of the table of commands."""
    for typed, told in ROWS:
        words = typed.split()
        commands = [w for w in re.split(r" / | ", typed) if w.islower() and w.isalpha()]
        if words[0] == "atlas":
            commands = [f"atlas {words[1]}"]
        elif "/" not in typed:
            commands = commands[:1]
        options = set(re.findall(r"(?<![\w-])--?[a-z][a-z-]*", typed + " " + " ".join(re.findall(r"`([^`]+)`", told))))
        yield from ((command, options) for command in commands)


def test_a_first_brain_by_the_readme(tmp_path, monkeypatch, run_line):
    monkeypatch.chdir(tmp_path)
    write_good_brain(tmp_path / "mine")
    for name in ("labels.nrrd", "template.nrrd", "structures.csv"):
        shutil.copy(tmp_path / "mine" / "atlas" / name, tmp_path)
    blocks = re.findall(r"^```(\w*)\n(.*?)^```", FIRST, re.MULTILINE | re.DOTALL)
    assert [kind for kind, _ in blocks] == ["", "toml", ""]
    for kind, text in blocks:
        if kind == "toml":
            for old, new in NUMBERS:
                assert old in text
                text = text.replace(old, new)
            for name in ("auto.ome.tif", "dye.ome.tif", "probe_a.json", "a_lfp.bin", "a_spikes.csv"):
                assert f'"{name}"' in text
                shutil.copy(tmp_path / "mine" / name, tmp_path / "my-brain")
            (tmp_path / "my-brain" / "brain.toml").write_text(text)
        for line in text.splitlines() if not kind else ():
            if not line.startswith("python3 -m venv"):  # the installation; what it installs is what runs here
                run_line(line)
    table = pd.read_csv(tmp_path / "my-brain" / "out" / "channels.csv")
    assert len(table) == 32
    assert {"VIP5", "CA1p"} <= set(table["region"])


def test_every_command_and_option_that_the_readme_names_is_there():
    found = dict(named())
    assert set(found) == set(LINES) | ELSEWHERE
    top = get_command(app).commands
    for command, options in named():
        first, *rest = command.split()
        entry = top[first].commands[rest[0]] if rest else top[first]
        known = {o for p in entry.params for o in (*p.opts, *p.secondary_opts)}
        assert options <= known, (command, options - known)


@pytest.mark.parametrize("command", LINES)
def test_a_command_of_the_readme_runs(command, desk, run_line):
    for line in LINES[command]:
        run_line(f"leadline {line}")


@pytest.mark.slow
def test_demo_runs_and_says_how_close_it_came(tmp_path, monkeypatch, run_line):
    """On a coarser brain than usual, for time."""
    monkeypatch.setattr(demo_run, "Recipe", lambda seed: small(Recipe(seed=seed), seconds=8.0, penetrations=1))
    said = run_line(f"leadline demo {tmp_path / 'demo'} --seed 5")
    assert re.search(r"tracks\D+1 of 1", said), said


def test_learn_takes_three_finished_brains(tmp_path, run_line):
    for k in range(3):
        write_finished_brain(tmp_path / f"b{k}", name=f"b{k}", shift_um=10.0 * k)
    run_line(f"leadline learn {tmp_path}/b0 {tmp_path}/b1 {tmp_path}/b2 --to {tmp_path}/lab.toml")
    assert (tmp_path / "lab.toml").stat().st_size > 0

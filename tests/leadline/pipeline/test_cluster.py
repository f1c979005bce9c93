"""Brains on a dask.distributed cluster: the job script of the README, word for word, and what is said when it fails."""

import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
from tests.finished_brain import write_finished_brain
from tests.leadline.cli.test_main import leadline

from leadline.base.errors import LeadlineError
from leadline.pipeline import cluster

README = Path(__file__).parents[3] / "README.md"
# srun starts a command once for each task; here there is one.
COMMANDS = {
    "srun": 'exec "$@"',
    "dask": f'exec {sys.executable} -m dask "$@"',
    "leadline": f'exec {sys.executable} -c "from leadline.cli.main import main; main()" "$@" --json',
}


def test_the_job_script_of_the_readme_runs(tmp_path):
    pytest.importorskip("distributed", reason="the extra 'cluster' is not installed")
    for name in ("finch", "heron"):
        write_finished_brain(tmp_path / "brains" / name, name=name)
    (tmp_path / "brains" / "owl").mkdir()
    (tmp_path / "brains" / "owl" / "brain.toml").write_text("format = 1\noops = 2\n")
    for name, line in COMMANDS.items():
        command = tmp_path / "bin" / name
        command.parent.mkdir(exist_ok=True)
        command.write_text(f"#!/bin/bash\n{line}\n")
        command.chmod(0o755)
    (script,) = re.findall(r"^```bash\n(#!/bin/bash\n.*?)^```", README.read_text(), re.MULTILINE | re.DOTALL)
    (tmp_path / "job.sh").write_text(script)
    environment = os.environ | {"PATH": f"{tmp_path / 'bin'}:{os.environ['PATH']}", "SLURM_JOB_ID": "7"}
    told = subprocess.run(
        ["bash", "job.sh"], cwd=tmp_path, env=environment, capture_output=True, text=True, check=False, timeout=300
    )
    assert told.returncode == 2, told.stderr
    brains = json.loads(told.stdout)["brains"]
    assert [(b["brain"], b["state"]) for b in brains] == [("finch", "done"), ("heron", "done"), ("owl", "wrong")]
    assert sum(row["channels"] for row in brains[0]["penetrations"]) == 32
    assert not list(tmp_path.glob("scheduler-*.json"))


def test_without_the_extra_it_says_what_to_install(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(LeadlineError, match=r"not installed\. Install it: pip install 'leadline\[cluster\]'"):
        cluster.run_on_cluster(["a"], "tcp://127.0.0.1:1", physiology=True, watch=print)


def test_a_scheduler_that_is_not_there_is_exit_2(tmp_path, monkeypatch):
    pytest.importorskip("distributed", reason="the extra 'cluster' is not installed")
    monkeypatch.setattr(cluster, "ANSWER_WITHIN_S", 0.5)
    with pytest.raises(LeadlineError, match=r"no scheduler answers at 'tcp://127.0.0.1:1'"):
        cluster.run_on_cluster(["a"], "tcp://127.0.0.1:1", physiology=True, watch=print)
    with pytest.raises(LeadlineError, match=r"none\.json' has not come to be"):
        cluster.run_on_cluster(["a"], str(tmp_path / "none.json"), physiology=True, watch=print)
    assert leadline("run", tmp_path / "*", "--scheduler", "x").returncode == 2  # no brain: nobody is asked

"""Full disks, closed folders, inputs that vanish or change under the run, two workers, clocks that were set."""

import json
import os
import shutil
import subprocess
import sys
from contextlib import contextmanager
from pathlib import Path

import pytest
from tests.faults.killing import at_moment, in_child
from tests.faults.scenes import PART, SCENES, tree

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def scene(tmp_path_factory):
    """A whole run on the tiny brain, done once undisturbed."""
    scene = SCENES["run"]
    scene.prepare(tmp_path_factory.mktemp("run"))
    return scene


def leadline(*words, before=lambda: None):
    """Run the command line in a child: (exit code, what it said)."""
    told = Path(words[1]).parent.parent / "said"

    def work():
        from leadline.cli.main import main

        sys.stdout = sys.stderr = told.open("w")
        sys.argv = ["leadline", *map(str, words)]
        before()
        try:
            main()
        finally:
            sys.stdout.flush()

    code = in_child(work, silent=False)
    return code, told.read_text()


def on_rename(name, action):
    """Do something just before a file gets its name."""
    sys.addaudithook(lambda event, args: event == "os.rename" and str(args[1]).endswith(name) and action())


def require_same(scene):
    """The brain's folder is now as after an undisturbed run."""
    assert scene.faults_after_restart() == []


@contextmanager
def small_disk(scene):
    """The scene on a disk of its own; None where this machine does not let us make one."""
    scene.fresh()
    home = scene.stage.with_name("disk")
    home.mkdir(exist_ok=True)
    mounted = subprocess.run(["mount", "-t", "tmpfs", "-o", "size=40m", "none", home], capture_output=True, check=False)
    if mounted.returncode:
        yield None
        return
    stage, scene.stage = scene.stage, home / "brain"
    try:
        shutil.copytree(stage, scene.stage)
        yield home
    finally:
        scene.stage = stage
        subprocess.run(["umount", home], check=True)


@pytest.mark.parametrize("left_kib", [60, 700])
def test_a_full_disk_is_said_and_the_run_goes_on_when_there_is_room(scene, left_kib):
    with small_disk(scene) as home:
        if home is None:
            pytest.skip("needs the right to mount a small disk")
        space = os.statvfs(home)
        with (home / "ballast").open("wb") as ballast:
            ballast.write(bytes(space.f_bavail * space.f_frsize - left_kib * 1024))
        code, said = leadline("run", scene.stage, "-q")
        assert scene.faults_after_cut() == []
        assert not [name for name in tree(scene.stage) if PART in name]
        (home / "ballast").unlink()
        assert code == 2, said
        assert leadline("run", scene.stage, "-q")[0] == 0
        require_same(scene)


def test_what_a_full_disk_is_told_as(scene):
    """Without a disk of its own: the system says ENOSPC when a file is flushed."""
    scene.fresh()

    def full():
        import errno

        def fsync(_):
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

        os.fsync = fsync

    code, said = leadline("run", scene.stage, before=full)
    assert code == 2
    assert "the disk is full. Free some space there, then start again; what is finished is kept" in said
    assert "Traceback" not in said
    assert scene.faults_after_cut() == []


def test_a_disk_that_may_not_be_written_is_said_and_nothing_is_changed(scene):
    with small_disk(scene) as home:
        if home is None:
            pytest.skip("needs the right to mount a small disk")
        subprocess.run(["mount", "-o", "remount,ro", home], check=True)
        command = [Path(sys.executable).parent / "leadline", "run", scene.stage]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        assert done.returncode == 2, done.stderr
        assert "can only be read. Copy the folder to where you may write" in done.stderr
        assert tree(scene.stage) == scene.before


@pytest.mark.skipif(os.geteuid() == 0, reason="nothing is closed to root")
def test_a_folder_that_may_not_be_written_is_said_and_nothing_is_changed(scene):
    scene.fresh()
    scene.stage.chmod(0o555)
    code, said = leadline("run", scene.stage)
    scene.stage.chmod(0o755)
    assert code == 2
    assert "may not be written. Copy the folder to where you may write" in said
    assert tree(scene.stage) == scene.before


@pytest.mark.parametrize(
    ("file", "share", "how"),
    [
        ("a_lfp.bin", 0.5, "is replaced"),
        ("dye.ome.tif", 0.1, "vanishes"),
        ("atlas/labels.nrrd", 0.02, "is replaced"),
    ],
)
def test_an_input_that_changes_under_the_run_is_noticed(scene, file, share, how):
    scene.fresh()
    path = scene.stage / file
    moments = scene.moments()

    def spoil():
        if how == "vanishes":
            path.unlink()
        else:
            data = bytearray(path.read_bytes())
            data[-1] ^= 1
            new = path.with_name("new")
            new.write_bytes(data)
            new.replace(path)

    code, said = leadline("run", scene.stage, "-q", before=lambda: at_moment(int(share * moments), spoil))
    assert code == 2, said
    assert file.split("/")[0] in said  # of an atlas, the folder
    assert "Traceback" not in said
    shutil.copy2(scene.home / file, path)
    assert leadline("run", scene.stage, "-q")[0] == 0
    require_same(scene)


def test_anchors_that_somebody_edits_under_the_run_are_not_written_over(scene):
    scene.fresh()
    assert leadline("profile", scene.stage, "-q")[0] == 0
    assert leadline("trace", scene.stage, "-q")[0] == 0
    edit = "penetration,shank,tip_distance_um,track_depth_um\nA,0,700.0,1020.0\n"

    def write():
        (scene.stage / "out" / "anchors.csv").write_text(edit)

    def when_the_posterior_is_written():
        sys.addaudithook(
            lambda event, args: write() if event == "os.rename" and "posterior.npz" in str(args[1]) else None
        )

    code, said = leadline("run", scene.stage, "-q", before=when_the_posterior_is_written)
    assert code == 2
    assert "changed while 'anchor' was at work; the edit is kept" in said
    assert (scene.stage / "out" / "anchors.csv").read_text() == edit
    assert leadline("run", scene.stage, "-q")[0] == 0
    assert "700.0,1020.0" in (scene.stage / "out" / "anchors.csv").read_text()


def test_of_two_runs_at_once_one_works_and_the_other_says_who_does(scene):
    scene.fresh()
    said = []

    def second():
        sys.addaudithook(
            lambda event, args: said or start() if event == "os.rename" and "qc.json" in str(args) else None
        )

    def start():
        said.append(True)
        command = [Path(sys.executable).parent / "leadline", "run", scene.stage]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        (scene.stage.parent / "second").write_text(json.dumps([done.returncode, done.stderr]))

    assert leadline("run", scene.stage, "-q", before=second)[0] == 0
    code, told = json.loads((scene.stage.parent / "second").read_text())
    assert code == 2
    assert f"on {os.uname().nodename}, process " in told
    assert "Wait until it has ended" in told
    require_same(scene)


def test_dates_of_files_do_not_matter(scene):
    """Files of 2096 give the same tables; once they are of 1970, there is still nothing to do."""
    scene.fresh()
    for when_s in (4e9, 0.0):
        for path in scene.stage.rglob("*"):
            os.utime(path, (when_s, when_s))
        code, said = leadline("run", scene.stage)
        assert code == 0
        require_same(scene)
    assert "nothing has changed" in said

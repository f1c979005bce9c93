"""Things that a user does, on tiny brains, that may be cut off at any moment; and what must stand afterwards.

A scene is laid out afresh for every kill. ``work`` is what is cut off and then done again; ``allowed`` says which
contents of a file are whole after the cut: those before, those after, and for a file that grows, those between.
"""

from __future__ import annotations

import importlib
import json
import os
import resource
import shutil
import sys
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING

from tests.faults.killing import in_child, looks
from tests.finished_brain import write_finished_brain
from tests.good_brain import write_good_brain
from tests.made_nwb import write_nwb

QUICK = """
[settings.register]
search_orientation = false
resolution_um = 400.0
[settings.anchor]
draws = 40
"""
if TYPE_CHECKING:
    from leadline_napari.session import Edits

PART = ".part-"
GROWS = ("steps.json", "history.jsonl", "lock")
MAY_DIFFER = ("history.jsonl", "lock")
"""The way to the edits, of which a cut may make one step of two; a dead worker's lock, which stops nobody."""
Tree = dict[str, bytes]


def leadline(*words: object) -> None:
    """The command line, in this process."""
    from leadline.cli.main import app

    app([str(w) for w in words], standalone_mode=False)


@dataclass
class Scene:
    """``layout`` : writes the brain into a folder. ``work`` : is cut off. ``lost`` : what was accepted before
    the cut and is not there. ``again`` : the work after the cut, where the user has to look first.
    ``between`` : files that the work writes several times; ``lost`` judges them."""

    name: str
    layout: Callable[[Path], object]
    work: Callable[[Path], object]
    lost: Callable[[Path], list[str]] = lambda _: []
    again: Callable[[Path], object] | None = None
    between: tuple[str, ...] = ()
    counted: int = 0
    cpu_s: float = 0.0
    before: Tree = field(default_factory=dict)
    after: Tree = field(default_factory=dict)

    def prepare(self, scratch: Path) -> None:
        """Lay the scene out once, do its work undisturbed, and import what it needed, so that children need not."""
        self.home, self.stage = scratch / f"{self.name}-home", scratch / self.name
        self.layout(self.home)
        self.before = tree(self.home)
        self.fresh()
        read, write = os.pipe()

        def undisturbed() -> None:
            self.work(self.stage)
            with os.fdopen(write, "w") as told:
                told.write(" ".join(sys.modules))

        pid = os.fork()
        if pid == 0:
            os.close(read)
            os._exit(in_child(undisturbed) & 0xFF)
        os.close(write)
        with os.fdopen(read) as told:
            modules = told.read().split()
        assert os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]) == 0, f"{self.name} does not come to its end"
        self.after = tree(self.stage)
        for name in modules:
            if name != "__main__" and not name.startswith(("_pytest", "pytest", "xdist", "tests.", "napari", "PyQt")):
                try:
                    importlib.import_module(name)
                except ImportError:
                    continue

    def moments(self) -> int:
        """How often the work looks at the file system."""
        if not self.counted:
            self.fresh()
            before = resource.getrusage(resource.RUSAGE_CHILDREN)
            self.counted = looks(lambda: self.work(self.stage))
            after = resource.getrusage(resource.RUSAGE_CHILDREN)
            self.cpu_s = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
            self.fresh()
        return self.counted

    def cut(self, ended: Callable[[Callable[[], object]], bool]) -> list[str]:
        """Cut the work off by ``ended`` (see :mod:`tests.faults.killing`), do it again, and say all that is wrong."""
        self.fresh()
        whole = ended(lambda: self.work(self.stage))
        found = [f"after the cut: {fault}" for fault in self.faults_after_cut()]
        if in_child(lambda: (self.again or self.work)(self.stage)):
            found.append("cannot be done again")
        found += [f"after the restart: {fault}" for fault in self.faults_after_restart()]
        return [f"{fault}{' (it was not cut)' if whole else ''}" for fault in found]

    def fresh(self) -> Path:
        """The scene as it was before its work."""
        shutil.rmtree(self.stage, ignore_errors=True)
        self.stage.with_suffix(".accepted").unlink(missing_ok=True)
        shutil.copytree(self.home, self.stage)
        return self.stage

    def faults_after_cut(self) -> list[str]:
        """What is half or lost now."""
        found = []
        now = tree(self.stage)
        for name, data in now.items():
            if Path(name).name.startswith(PART) or f"/{PART}" in f"/{name}":
                continue
            if Path(name).name in (*GROWS, *self.between):
                if not grown(Path(name).name, data):
                    found.append(f"{name} is half")
            elif data not in (self.before.get(name.removesuffix(".backup")), self.after.get(name)):
                found.append(f"{name} is neither as before nor as after")
        found += [f"{name} is lost" for name in self.before if name in self.after and name not in now]
        return found + self.lost(self.stage)

    def faults_after_restart(self) -> list[str]:
        """How the tree differs from that of an undisturbed run."""
        now = tree(self.stage)
        names = [name for name in {**now, **self.after} if Path(name).name not in MAY_DIFFER]
        extra = [f"{name} is left over" for name in names if name not in self.after]
        return extra + [f"{name} differs" for name in names if name in self.after and now.get(name) != self.after[name]]


def grown(name: str, data: bytes) -> bool:
    """Whether a file that grows is whole."""
    try:
        if name == "history.jsonl":
            for line in data.decode().split("\n")[:-1]:  # a last line cut short is left out when it is read
                json.loads(line)
        elif name == "steps.json":
            return bool(json.loads(data)["format"] == 1)
    except ValueError:
        return False
    return True


def tree(folder: Path) -> Tree:
    """Every file below a folder; of NWB files, whose objects never have the same names twice, what they hold."""
    return {
        p.relative_to(folder).as_posix(): _held(p) if ".nwb" in p.suffixes else p.read_bytes()
        for p in sorted(folder.rglob("*"))
        if p.is_file()
    }


def _held(path: Path) -> bytes:
    """Every dataset and attribute of an HDF5 file but the random names of objects; its bytes where it is none."""
    import h5py

    found: list[str] = []

    def note(name: str, item: object) -> None:
        value = item[()] if isinstance(item, h5py.Dataset) else ""  # type: ignore[attr-defined]
        said = {k: str(v) for k, v in item.attrs.items() if k not in ("object_id", "target")}  # type: ignore[attr-defined]
        found.append(f"{name} {said} {value.tolist() if hasattr(value, 'tolist') else value}")

    try:
        with h5py.File(path, "r") as handle:
            handle.visititems(note)
    except OSError:
        return path.read_bytes()
    return "\n".join(found).encode()


def quick_brain(folder: Path) -> None:
    """The tiny brain with settings that take no time."""
    file = write_good_brain(folder)
    file.write_text(file.read_text() + QUICK)


def _moved_anchor(folder: Path) -> None:
    """A whole run behind it, and another anchor in brain.toml since."""
    quick_brain(folder)
    assert in_child(lambda: leadline("run", folder, "-q")) == 0
    file = folder / "brain.toml"
    file.write_text(file.read_text().replace("track_depth_um = 600.0", "track_depth_um = 640.0"))


def _finished(folder: Path) -> None:
    assert in_child(lambda: write_finished_brain(folder)) == 0


def _accept(folder: Path) -> None:
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.anchors import accept

    accept(read_brain(folder), ["all"])


def _goals() -> tuple[Callable[[Edits], Edits], ...]:
    """Edits in the plugin's store, one after the other: an anchor, another, a track, a pair of places."""
    from leadline.model.anchor import Anchor
    from leadline_napari.session import Pair, TrackEdit

    points = ((500.0, 600.0, 700.0), (600.0, 700.0, 800.0))
    return (
        lambda e: replace(e, anchors=(*e.anchors, Anchor("A", 0, 700.0, 1020.0))),
        lambda e: replace(e, anchors=(*e.anchors, Anchor("A", 0, 500.0, 1320.0))),
        lambda e: replace(e, tracks=(TrackEdit("A", 0, points),)),
        lambda e: replace(e, pairs=(Pair((1.0, 2.0, 3.0), (4.0, 5.0, 6.0)),)),
    )


def _states(folder: Path) -> list[Edits]:
    """The edits before the work, and after each edit of it."""
    from leadline.io.brainfile import read_brain
    from leadline_napari.store import Store

    states = [Store(read_brain(folder)).open().now]
    for goal in _goals():
        states.append(goal(states[-1]))
    return states


def _edits(folder: Path) -> None:
    """Go on from where the edits are; every one that is accepted is told beside the brain."""
    from leadline.io.brainfile import read_brain
    from leadline_napari.history import line_of
    from leadline_napari.store import Store

    store = Store(read_brain(folder))
    states = _states(folder.with_name("edits-home"))
    now = states.index(store.open().now)
    for number, state in enumerate(states[now + 1 :], now + 1):
        store.keep(state, line_of(state))
        folder.with_suffix(".accepted").write_text(str(number))


def _edits_lost(folder: Path) -> list[str]:
    """What was told to be accepted and is not there."""
    from leadline.io.brainfile import read_brain
    from leadline_napari.store import Store

    told = folder.with_suffix(".accepted")
    accepted = int(told.read_text() or 0) if told.is_file() else 0
    there = _states(folder.with_name("edits-home")).index(Store(read_brain(folder)).open().now)
    return [f"{accepted} edits were accepted, {there} are there"] if there < accepted else []


def _nwb(folder: Path) -> None:
    _finished(folder)
    assert in_child(lambda: write_nwb(folder)) == 0


def _export(folder: Path) -> None:
    output = folder / "located.nwb"
    if not output.exists():  # done before the cut
        leadline("export", folder, "--to", "nwb", "--source", folder / "session.nwb", "--output", output, "-q")


def _in_place(folder: Path) -> None:
    leadline("export", folder, "--to", "nwb", "--source", folder / "session.nwb", "--in-place", "-q")


def _in_place_again(folder: Path) -> None:
    """The message about a backup has been read and followed: the file is whole, old or new, so the backup can go."""
    (folder / "session.nwb.backup").unlink(missing_ok=True)
    _in_place(folder)


def _everything_else(folder: Path) -> None:
    """Report with figures, units, tables for others, an atlas over an older one."""
    leadline("report", folder, "--figures", "-q")
    leadline("units", folder, "-q")
    leadline("export", folder, "--to", "bids", "-q")
    leadline("export", folder, "--to", "probeinterface", "-q")
    atlas = folder / "atlas"
    leadline("atlas", "import", atlas / "labels.nrrd", atlas / "template.nrrd", atlas / "structures.csv",
             folder / "atlas2", "--name", "again")  # fmt: skip


SCENES = {
    scene.name: scene
    for scene in (
        Scene("run", quick_brain, lambda folder: leadline("run", folder, "-q")),
        Scene("rerun", _moved_anchor, lambda folder: leadline("run", folder, "-q")),
        Scene("accept", _finished, _accept),
        Scene("edits", _finished, _edits, _edits_lost, between=("anchors.csv",)),
        Scene("export", _nwb, _export),
        Scene("in-place", _nwb, _in_place, again=_in_place_again),
        Scene("others", _finished, _everything_else),
    )
}

"""The user's edits on disk: every one is saved before it counts, and can be undone after a restart.

The files that the pipeline reads (``out/anchors.csv``, ``track_edits.csv``, ``registration_pairs.csv``) are the
truth; the journal ``.leadline/history.jsonl`` remembers the way there. An edit is written to the files first. Where
they say something else than the journal's last word (another program, a crash between the two), that is taken over as
one more step, so nothing is lost and nothing is undone by surprise.
"""

from __future__ import annotations

import os
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.atomic import write_text
from leadline.base.errors import MALFORMED, LeadlineError
from leadline.io.points import pairs_text, read_pairs, read_track_edits, track_edits_text
from leadline.model.track import HandTrack
from leadline.pipeline.in_force import anchors_in_force, write_in_force
from leadline.pipeline.lock import sole_worker
from leadline.pipeline.record import Record
from leadline_napari.history import History, line_of, replay
from leadline_napari.session import Edits, Pair, TrackEdit

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.base.arrays import FloatArray
    from leadline.model.brain import Brain


class ChangedOutside(LeadlineError):
    """Another program changed the files since they were last read."""


class Store:
    """Files of one brain's edits."""

    def __init__(self, brain: Brain) -> None:
        self.brain = brain
        self._seen = Edits()
        self._pending: tuple[str, ...] = ()

    @property
    def anchors(self) -> Path:
        """Anchors in force."""
        return self.brain.out / "anchors.csv"

    @property
    def tracks(self) -> Path:
        """Tracks drawn by hand."""
        return self.brain.track_edits

    @property
    def pairs(self) -> Path:
        """Places named in stack and atlas."""
        return self.brain.registration_pairs

    @property
    def journal(self) -> Path:
        """Every step, one a line."""
        return self.brain.cache / "history.jsonl"

    def open(self) -> History:
        """The history as it was left, going on to what the files say now.

        Raises LeadlineError when a file cannot be read.
        """
        told = self._replayed()
        now = self.on_disk(told.now if told else Edits())
        self._seen = now
        self._pending = () if told and told.now == now else (line_of(now),)
        if told is None:
            return History(now)
        return told if told.now == now else told.do(now)

    def on_disk(self, last: Edits) -> Edits:
        """What the files say; what has no file (refused suggestions) is as in ``last``."""
        record = Record(self.brain.folder, self.brain.cache)
        tracks = sorted(read_track_edits(self.tracks).items())
        stack_um, atlas_um = read_pairs(self.pairs)
        return Edits(
            anchors_in_force(self.brain, record),
            tuple(TrackEdit(*key, tuple(_point(p) for p in t.points_um), t.entry_set) for key, t in tracks),
            last.refused,
            tuple(Pair(_point(s), _point(a)) for s, a in zip(stack_um, atlas_um, strict=True)),
        )

    def keep(self, edits: Edits, line: str) -> None:
        """Save ``edits`` and the journal line that led to them; when this returns, a crash loses nothing.

        Raises ChangedOutside when the files are not as they were left, LeadlineError when a run holds the brain;
        nothing is written then.
        """
        with sole_worker(self.brain.file):
            if self.on_disk(self._seen) != self._seen:
                raise ChangedOutside(
                    "another program changed the anchors or tracks",
                    where=str(self.brain.folder),
                    mend="They were read again; your last edit was not made",
                )
            write_in_force(self.brain, Record(self.brain.folder, self.brain.cache), edits.anchors)
            tracks = {(t.penetration, t.shank): HandTrack(np.array(t.points_um), t.entry_set) for t in edits.tracks}
            _write_or_drop(self.tracks, bool(tracks), track_edits_text(tracks))
            stack_um = np.array([p.stack_um for p in edits.pairs])
            atlas_um = np.array([p.atlas_um for p in edits.pairs])
            _write_or_drop(self.pairs, bool(edits.pairs), pairs_text(stack_um, atlas_um))
            _append(self.journal, (*self._pending, line))
        self._seen, self._pending = edits, ()

    def _replayed(self) -> History | None:
        if not self.journal.is_file():
            return None
        try:
            return replay(self.journal.read_text(encoding="utf-8", errors="replace").splitlines())
        except (*MALFORMED, KeyError, TypeError, AttributeError, OverflowError) as error:
            raise LeadlineError(
                f"is damaged ({error!r})", where=str(self.journal), mend="Delete it: only undo is lost, no anchor"
            ) from error


def _write_or_drop(path: Path, wanted: bool, text: str) -> None:
    """A file that would hold nothing is taken away, so that the pipeline sees an untouched brain."""
    if wanted:
        write_text(path, text)
    else:
        path.unlink(missing_ok=True)


def _append(path: Path, lines: tuple[str, ...]) -> None:
    """Add lines, flushed to the disk; a last line that a crash cut short is taken away first."""
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("a+b") as handle:
        handle.seek(0)
        handle.truncate(handle.read().rfind(b"\n") + 1)
        handle.write("".join(f"{line}\n" for line in lines).encode())
        handle.flush()
        os.fsync(handle.fileno())


def _point(values: FloatArray) -> tuple[float, float, float]:
    a, b, c = (float(v) for v in values)
    return a, b, c

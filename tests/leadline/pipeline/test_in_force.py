"""Anchors in force: what was accepted stays, what left brain.toml goes, wherever a process was killed in between."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.model.anchor import Anchor
from leadline.pipeline import in_force
from leadline.pipeline.in_force import anchors_in_force, write_in_force
from leadline.pipeline.record import Record


@dataclass(frozen=True)
class Brain:
    """As much of a brain as anchors need."""

    folder: Path
    anchors: tuple[Anchor, ...] = ()

    @property
    def out(self):
        return self.folder / "out"

    @property
    def record(self):
        """As the next process reads it."""
        return Record(self.folder, self.folder / ".leadline")

    @property
    def now(self):
        return set(anchors_in_force(self, self.record))

    def write(self, anchors):
        write_in_force(self, self.record, sorted(anchors))


class Killed(BaseException):
    """The process is gone."""


def killed_before_the_file_is_written(brain, anchors):
    def die(*_):
        raise Killed

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(in_force, "write_text", die)
        with pytest.raises(Killed):
            brain.write(anchors)


A, B, C, D = (Anchor("A", 0, 1000.0 - 100 * k, 500.0 + 100 * k, note=f"n{k}") for k in range(4))


def test_an_anchor_that_leaves_brain_toml_is_gone_though_no_step_was_finished(tmp_path):
    Brain(tmp_path, (A,)).write({A})
    assert Brain(tmp_path).now == set()


def test_an_anchor_that_a_user_makes_again_by_hand_stays(tmp_path):
    Brain(tmp_path, (A,)).write({A})
    Brain(tmp_path).write({A})
    assert Brain(tmp_path).now == {A}


STEP = st.tuples(st.sampled_from(["toml", "run", "edit"]), st.sets(st.sampled_from([0, 1])), st.booleans())


@settings(max_examples=60, deadline=None)
@given(steps=st.lists(STEP, max_size=8))
def test_whatever_happens_in_force_are_the_anchors_of_brain_toml_and_those_accepted(steps, tmp_path_factory):
    """Runs and edits, some of them killed between their two writes; A and B in brain.toml, C and D by hand."""
    brain, accepted = Brain(tmp_path_factory.mktemp("brain")), set()
    for what, chosen, killed in steps:
        if what == "toml":
            brain = replace(brain, anchors=tuple((A, B)[k] for k in sorted(chosen)))
        else:
            wanted = brain.now if what == "run" else {*brain.anchors, *((C, D)[k] for k in chosen)}
            if killed:
                killed_before_the_file_is_written(brain, wanted)
            else:
                brain.write(wanted)
                accepted = wanted - set(brain.anchors)
        assert brain.now == accepted | set(brain.anchors)

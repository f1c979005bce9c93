"""Runs of the pipeline from the screen: which stages are done, start, cancel, settings."""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING, Protocol

from leadline.base.errors import Faults, LeadlineError
from leadline.io.brainfile import read_brain
from leadline.pipeline.run import Summary, run
from leadline.pipeline.standing import Standing, standing
from leadline_napari.states import BrainState, PenetrationState, StageState

if TYPE_CHECKING:
    from collections.abc import Callable

    from leadline.base.progress import Progress
    from leadline.model.brain import Brain
    from leadline_napari.controllers.desk import Desk, Runner
    from leadline_napari.results import Results

TITLES = {
    "register": "Register stack to atlas",
    "trace": "Trace the dye",
    "profile": "Profile the recordings",
    "anchor": "Infer depth maps",
    "locate": "Locate channels",
}


class View(Protocol):
    """What the brain view can be told."""

    def show_state(self, state: BrainState) -> None:
        """Draw."""


class RunController:
    """Starts runs and tells the brain view how far the brain has come. ``finished`` is called after every run."""

    def __init__(self, desk: Desk, view: View, runner: Runner, finished: Callable[[], None]) -> None:
        self.desk, self.view, self.runner, self.finished = desk, view, runner, finished
        self.stages: tuple[Standing, ...] = ()
        self.results: Results | None = None
        self.messages: tuple[str, ...] = ()
        self.running = ""
        desk.listen(lambda before, after: self._show())

    def open(self, results: Results) -> None:
        """Take the products of the brain and look how far it has come."""
        self.results = results
        self._look()

    def start(self, until: str, progress: Progress) -> None:
        """Run up to a stage; edits wait until it has ended."""
        if self.running:
            return
        self.running, self.messages = TITLES[until], ()
        self._show()
        file = self.desk.brain.file
        self.runner.submit(
            "run", lambda: run(read_brain(file), until=until, progress=progress), self._ended, self._failed
        )

    def tell(self, message: str) -> None:
        """Add a message."""
        if message and message not in self.messages:
            self.messages = (*self.messages, message)[-30:]
            self._show()

    def _ended(self, summary: object) -> None:
        assert isinstance(summary, Summary)
        self.running = ""
        done = ", ".join(summary.done) or "nothing had changed"
        self.messages = (f"Done: {done}", *(f"{step}: {words}" for step, words in summary.warnings))
        self.finished()

    def _failed(self, words: str) -> None:
        self.running = ""
        self.messages = tuple(words.split("\n")) if words else ("Stopped; finished stages are kept",)
        self.finished()

    def _look(self) -> None:
        brain = self.desk.brain
        self.runner.submit("standing", lambda: standing(brain), self._seen, self.tell)
        self._show()

    def _seen(self, stages: object) -> None:
        assert isinstance(stages, tuple)
        self.stages = stages
        if not self.messages:  # a brain that was run before: what its stages had to say
            self.messages = tuple(f"{step.step}: {words}" for step in self.stages for words in step.warnings)
        self._show()

    def _show(self) -> None:
        brain, session = self.desk.brain, self.desk.session
        self.view.show_state(
            BrainState(
                name=brain.name,
                folder=str(brain.folder),
                stages=stage_states(self.stages),
                penetrations=tuple(self._penetration(p.name) for p in brain.penetrations),
                messages=self.messages,
                running=self.running,
                selected=(session.selection.penetration, session.selection.shank),
            )
        )

    def _penetration(self, name: str) -> PenetrationState:
        edits, results = self.desk.session.edits, self.results
        shanks = tuple(sorted(s for n, s in results.tracks if n == name)) if results else ()
        drawn = sum(1 for t in edits.tracks if t.penetration == name)
        traced = f"{len(shanks)} traced" if shanks else "no track"
        if drawn:
            traced += f", {drawn} by hand"
        recording = "profiled" if results and name in results.profiles else "no profile"
        refused = set(edits.refused)
        taken = {(a.penetration, a.shank, a.landmark) for a in edits.anchors}
        suggestions = results.suggestions if results else ()
        still_open = sum(
            1
            for s in suggestions
            if s.anchor.penetration == name
            and (s.anchor.penetration, s.anchor.shank, s.anchor.landmark) not in refused | taken
        )
        anchors = sum(1 for a in edits.anchors if a.penetration == name)
        return PenetrationState(name, shanks, traced, recording, anchors, still_open)


def stage_states(steps: tuple[Standing, ...]) -> tuple[StageState, ...]:
    """Steps gathered by stage: the least finished one speaks for its stage."""
    rank = {"missing": 0, "changed": 1, "done": 2}
    found = []
    for stage, title in TITLES.items():
        mine = [s for s in steps if s.stage == stage]
        if not mine:
            continue
        least = min(mine, key=lambda s: rank[s.state])
        notes = [w for s in mine for w in s.warnings]
        found.append(StageState(stage, title, least.state, "\n".join(notes)))
    return tuple(found)


def with_settings(text: str, changes: dict[str, dict[str, object]]) -> str:
    """``brain.toml`` with values of ``[settings.STAGE]`` changed and every other line as it was; None takes one out."""
    for stage, values in changes.items():
        for key, value in values.items():
            text = _with_setting(text, f"settings.{stage}", key, value)
    return text


def settings_of(brain: Brain) -> dict[str, dict[str, object]]:
    """Every setting by stage, as it stands."""
    return {stage: dict(values) for stage, values in dataclasses.asdict(brain.settings).items()}


def save_settings(brain: Brain, changes: dict[str, dict[str, object]]) -> Brain:
    """Write changed settings into brain.toml and read it back.

    Raises LeadlineError, and leaves the file as it was, when a value does not fit.
    """
    from leadline.base.atomic import write_text

    before = brain.file.read_text(encoding="utf-8")
    write_text(brain.file, with_settings(before, changes))
    try:
        return read_brain(brain.file)
    except (LeadlineError, Faults):
        write_text(brain.file, before)
        raise


def _with_setting(text: str, table: str, key: str, value: object) -> str:
    lines = text.splitlines()
    head = next((i for i, line in enumerate(lines) if line.split("#")[0].strip() == f"[{table}]"), None)
    if head is None:
        return text if value is None else f"{text.rstrip()}\n\n[{table}]\n{key} = {_toml(value)}\n"
    end = next((i for i in range(head + 1, len(lines)) if lines[i].lstrip().startswith("[")), len(lines))
    kept = [line for line in lines[head + 1 : end] if line.split("=")[0].strip() != key]
    while kept and not kept[-1].strip():
        kept.pop()
    if value is not None:
        kept.append(f"{key} = {_toml(value)}")
    rest = ["", *lines[end:]] if end < len(lines) else []
    return "\n".join([*lines[: head + 1], *kept, *rest]) + "\n"


def _toml(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, tuple | list):
        return f"[{', '.join(_toml(v) for v in value)}]"
    return f'"{value}"' if isinstance(value, str) else repr(value)

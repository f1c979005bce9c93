"""Runs the steps of a brain in order; what has not changed is not done again, what is finished is kept."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from leadline.base.atomic import sweep
from leadline.base.errors import LeadlineError
from leadline.base.fingerprint import fingerprint_path, fingerprint_value
from leadline.base.memory import give_back
from leadline.base.progress import SILENT, Progress
from leadline.pipeline.bench import Bench
from leadline.pipeline.ingest import ingest
from leadline.pipeline.lock import sole_worker
from leadline.pipeline.provenance import write_provenance
from leadline.pipeline.record import Done, Record
from leadline.pipeline.stages import STAGES, Step, plan

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.model.brain import Brain

READ_THE_STACK = ("register", "trace")


@dataclass(frozen=True, slots=True)
class Summary:
    """What a run did. ``done``, ``skipped`` : step names. ``warnings`` : (step, sentence) of all steps, also old."""

    brain: str
    done: tuple[str, ...]
    skipped: tuple[str, ...]
    warnings: tuple[tuple[str, str], ...]


def run(brain: Brain, *, until: str = "locate", progress: Progress = SILENT) -> Summary:
    """Run every step up to the stage ``until`` and what it needs.

    Raises LeadlineError when an input is wrong; steps finished before it are kept.
    """
    with sole_worker(brain.file):
        return _run(Bench(brain, progress), until)


def _run(bench: Bench, until: str) -> Summary:
    brain = bench.brain
    record = Record(brain.folder, brain.cache)
    steps = _needed(plan(brain, record), until)
    marks: dict[Path, str] = {}
    checked = False
    done, skipped = [], []
    for step in steps:
        inputs = {str(_short(p, brain)): marks.setdefault(p, _mark(p)) for p in step.reads}
        key = _key(step, inputs, record)
        old = record.steps.get(step.name)
        if old is not None and old.key == key and old.intact(brain.folder):
            skipped.append(step.name)
            continue
        if not checked:
            _check(bench)
            sweep(brain.out)
            sweep(brain.cache)
            checked = True
        bench.progress.begin(step.name, 0)
        try:
            if step.stage in READ_THE_STACK:
                ingest(bench)
                give_back()
            warnings = step.run(bench)
        finally:
            _require_unchanged(step, marks, record, brain)  # whatever else went wrong, a change is why
        outputs = {str(p.relative_to(brain.folder)): fingerprint_path(p) for p in step.gives}
        record.keep(step.name, Done(key, outputs, tuple(warnings), inputs))
        done.append(step.name)
        give_back()
    if until == "locate":
        write_provenance(brain, record, [s.name for s in steps])
    warnings_all = tuple((s.name, w) for s in steps for w in record.steps[s.name].warnings)
    return Summary(brain.name, tuple(done), tuple(skipped), warnings_all)


def _needed(steps: tuple[Step, ...], until: str) -> tuple[Step, ...]:
    """The steps of stage ``until`` and all that they need, in order."""
    if until not in STAGES:
        raise LeadlineError(f"there is no stage '{until}'", mend=f"Stages are {', '.join(STAGES)}")
    wanted = {s.name for s in steps if s.stage == until}
    for step in reversed(steps):
        if step.name in wanted:
            wanted.update(step.needs)
    return tuple(s for s in steps if s.name in wanted)


def _key(step: Step, inputs: dict[str, str], record: Record) -> str:
    from leadline import __version__

    needs = {name: record.steps[name].product for name in step.needs}
    gives = sorted(path.name for path in step.gives)  # a program that writes one file more has to run again
    return fingerprint_value([__version__, step.name, step.key, inputs, needs, gives])


def _check(bench: Bench) -> None:
    from leadline.pipeline.check import check

    found = check(bench.brain, bench)
    if found.faults:
        from leadline.base.errors import Faults

        raise found.faults[0] if len(found.faults) == 1 else Faults(found.faults)


def _require_unchanged(step: Step, marks: dict[Path, str], record: Record, brain: Brain) -> None:
    """A file that changed while it was read makes a result of two halves."""
    for path in step.reads:
        if not path.exists() or _mark(path) != marks[path]:
            what = "changed" if path.exists() else "vanished"
            mend = "Let it be and run again" if path.exists() else "Put it back and run again"
            raise LeadlineError(f"{what} while '{step.name}' was reading it", where=str(path), mend=mend)
    for name in step.needs:
        if not record.steps[name].intact(brain.folder):
            raise LeadlineError(
                f"what '{name}' wrote changed while '{step.name}' was reading it",
                where=str(brain.folder),
                mend="Let it be and run again",
            )


def _mark(path: Path) -> str:
    try:
        return fingerprint_path(path)
    except OSError as error:
        raise LeadlineError(
            f"cannot be read ({error.strerror})", where=str(path), mend="Put it back, or get the right to read it"
        ) from error


def _short(path: Path, brain: Brain) -> Path:
    return path.relative_to(brain.folder) if path.is_relative_to(brain.folder) else path


def without_physiology(brain: Brain) -> Brain:
    """The brain with its recordings' word on depth left out (``--no-physiology``)."""
    anchor = replace(brain.settings.anchor, physiology=False)
    return replace(brain, settings=replace(brain.settings, anchor=anchor))

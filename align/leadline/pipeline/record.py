"""What has been done to a brain: for every step the fingerprint of what went in and of what came out."""

from __future__ import annotations

import json
import os
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from leadline.base.atomic import write_text
from leadline.base.errors import MALFORMED, LeadlineError
from leadline.base.fingerprint import fingerprint_path, fingerprint_value
from leadline.model.anchor import Anchor

if TYPE_CHECKING:
    from collections.abc import Mapping
    from collections.abc import Set as AbstractSet

RECORD_FORMAT = 1


@dataclass(frozen=True, slots=True)
class Done:
    """One finished step. ``key`` : fingerprint of all that went in. ``outputs`` : path -> fingerprint."""

    key: str
    outputs: Mapping[str, str]
    warnings: tuple[str, ...] = ()
    inputs: Mapping[str, str] = field(default_factory=dict)

    def intact(self, folder: Path) -> bool:
        """Whether every output is there as it was left."""
        return all(
            _inside(folder / name, folder) and fingerprint_path(folder / name) == mark
            for name, mark in self.outputs.items()
        )

    @property
    def product(self) -> str:
        """Fingerprint of the outputs together."""
        return fingerprint_value(dict(self.outputs))


class Record:
    """The steps done so far, kept in ``.leadline/steps.json`` and saved after every step.

    ``repeated_anchors`` : those of ``out/anchors.csv`` that stood in brain.toml when it was written.
    """

    def __init__(self, folder: Path, cache: Path) -> None:
        self.folder, self.file = folder, cache / "steps.json"
        self.steps: dict[str, Done] = {}
        self.repeated_anchors: frozenset[Anchor] = frozenset()
        if self.file.is_file():
            self._read()

    def _read(self) -> None:
        try:
            content = json.loads(self.file.read_text(encoding="utf-8"))
            if content["format"] == RECORD_FORMAT:
                self.steps = {
                    name: Done(str(s["key"]), dict(s["outputs"]), tuple(s["warnings"]), dict(s["inputs"]))
                    for name, s in content["steps"].items()
                }
                self.repeated_anchors = frozenset(Anchor(**row) for row in content.get("repeated_anchors", ()))
        except (*MALFORMED, KeyError, TypeError, AttributeError) as error:
            raise LeadlineError(
                f"is damaged ({error!r})", where=str(self.file), mend="Delete it; the stages will run again"
            ) from error

    def keep(self, name: str, done: Done) -> None:
        """Remember a finished step, on disk."""
        self.steps[name] = done
        self._save()

    def remember_repeated(self, anchors: AbstractSet[Anchor]) -> None:
        """Remember which anchors of the file are those of brain.toml, on disk."""
        if anchors != self.repeated_anchors:
            self.repeated_anchors = frozenset(anchors)
            self._save()

    def _save(self) -> None:
        steps = {
            name: {
                "key": d.key,
                "outputs": dict(d.outputs),
                "warnings": list(d.warnings),
                "inputs": dict(d.inputs),
            }
            for name, d in self.steps.items()
        }
        repeated = [asdict(a) for a in sorted(self.repeated_anchors, key=repr)]
        content = {"format": RECORD_FORMAT, "steps": steps, "repeated_anchors": repeated}
        write_text(self.file, json.dumps(content, indent=1) + "\n")


def _inside(path: Path, folder: Path) -> bool:
    """Whether ``path`` is a file there is, inside ``folder``."""
    return os.path.isfile(path) and Path(os.path.realpath(path)).is_relative_to(folder.resolve())

"""``brain.toml``: every key checked, every fault told at once, unknown keys answered with the nearest known one."""

from __future__ import annotations

import dataclasses
import os
import tomllib
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar, get_type_hints

from leadline.base.errors import MALFORMED, Faults, LeadlineError, nearest
from leadline.io.brain_values import (
    as_boolean,
    as_count,
    as_dtype,
    as_increasing_pair,
    as_integer,
    as_name,
    as_not_negative,
    as_number,
    as_positive,
    as_text,
    as_toward,
    as_triple,
    as_triple_positive,
    as_whole,
    as_whole_list,
    as_word_pairs,
)
from leadline.model.anchor import Anchor
from leadline.model.brain import Brain, Penetration, RecordingSource, StackSource
from leadline.model.frames import orientation
from leadline.model.settings import Settings

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable

T = TypeVar("T")
FORMAT = 1
_MISSING: Any = object()


def find_brain_file(path: Path) -> Path:
    """The ``brain.toml`` that a user means by a file or by its folder.

    Raises LeadlineError when there is none.
    """
    file = path / "brain.toml" if path.is_dir() else path
    if not file.is_file():
        raise LeadlineError(
            "there is no such file", where=str(file), mend="Name a brain.toml or the folder that holds it"
        )
    return file


def read_brain(path: Path) -> Brain:
    """Read and check a ``brain.toml`` (or the one in a folder); the files it names must exist.

    Raises LeadlineError that lists every fault found.
    """
    file = find_brain_file(Path(path)).absolute()
    try:
        content = tomllib.loads(file.read_text(encoding="utf-8"))
    except UnicodeDecodeError as error:
        raise LeadlineError(f"is not UTF-8 text ({error.reason})", where=str(file), mend="Save it as UTF-8") from error
    except MALFORMED as error:
        raise LeadlineError(f"is not valid TOML: {error}", where=str(file), mend="Mend that line") from error
    faults: list[LeadlineError] = []
    brain = _brain(_Table(content, file.name, file.parent, faults), file)
    faults += _leading_out(brain)
    if faults:
        raise faults[0] if len(faults) == 1 else Faults(faults)
    return brain


def _leading_out(brain: Brain) -> list[LeadlineError]:
    """A fault for every folder of results that is a link out of the brain's folder: nothing is written elsewhere."""
    home, found = brain.folder.resolve(), []
    for top in (brain.out, brain.cache):
        for folder in (top, *(p for p in top.glob("*") if p.is_symlink())):
            leads = Path(os.path.realpath(folder))
            if not leads.is_relative_to(home):
                what = f"is a link that leads out of the brain's folder, to {leads}"
                mend = "Remove the link; to keep results on another disk, move the whole folder there"
                found.append(LeadlineError(what, where=str(folder), mend=mend))
    return found


class _Table:
    """One table of the file: hands out checked values and collects faults instead of stopping at the first."""

    def __init__(self, values: object, where: str, folder: Path, faults: list[LeadlineError]) -> None:
        self.where, self.folder, self.faults = where, folder, faults
        self.asked: set[str] = set()
        self.values: dict[str, Any] = values if isinstance(values, dict) else {}
        if not isinstance(values, dict):
            self.fault("must be a table", "Write it as [name] with keys below it")

    def fault(self, what: str, mend: str = "", key: str = "") -> None:
        self.faults.append(LeadlineError(what, where=f"{self.where}, {key}" if key else self.where, mend=mend))

    def get(self, key: str, check: Callable[[Any], T], want: str, default: Any = _MISSING) -> Any:
        """The checked value of ``key``; ``check`` raises ValueError or TypeError when it does not fit."""
        self.asked.add(key)
        if key not in self.values:
            if default is _MISSING:
                self.fault(f"'{key}' is missing", f"Write {key} = {want}")
                return None
            return default
        try:
            return check(self.values[key])
        except LeadlineError as error:
            self.fault(error.what, error.mend, key)
        except (ValueError, TypeError, OverflowError):
            self.fault(f"{key} = {self.values[key]!r} is not {want}", f"Write {want}", key)
        return None if default is _MISSING else default

    def table(self, key: str, *, needed: bool = False) -> _Table:
        self.asked.add(key)
        if key not in self.values and needed:
            self.fault(f"table [{key}] is missing", f"Add [{key}]")
            return _Table({}, f"{self.where}, [{key}]", self.folder, [])
        return _Table(self.values.get(key, {}), f"{self.where}, [{key}]", self.folder, self.faults)

    def tables(self, key: str, label: str) -> list[_Table]:
        self.asked.add(key)
        rows = self.values.get(key, [])
        if not isinstance(rows, list):
            self.fault(f"[{key}] is one table", f"Write [[{key}]] with two brackets", key)
            return []
        return [_Table(row, f"{self.where}, {label} {i}", self.folder, self.faults) for i, row in enumerate(rows, 1)]

    def path(self, key: str, default: Any = _MISSING, *, folder_ok: bool = True) -> Any:
        return self.get(key, lambda value: self._existing(value, folder_ok), '"the path of a file"', default)

    def _existing(self, value: object, folder_ok: bool) -> Path:
        path = self.folder / as_text(value)
        if not os.path.exists(path):  # unlike Path.exists it takes any text for a name
            raise LeadlineError(f"{path} does not exist", mend=_neighbours(path))
        if path.is_dir() and not folder_ok:
            raise LeadlineError(f"{path} is a folder", mend="Name a file")
        if not (path.is_dir() or path.is_file()):
            raise LeadlineError(f"{path} is neither a file nor a folder", mend="Name a file")
        return path

    def finish(self) -> None:
        """Fault every key that nobody asked for."""
        for key in self.values:
            if key not in self.asked:
                self.fault(f"unknown key '{key}'", nearest(key, self.asked))


def _brain(top: _Table, file: Path) -> Brain:
    version = top.get("format", as_integer, "1", default=FORMAT)
    if version != FORMAT:
        top.fault(f"format = {version} is not known", f"This Leadline reads format = {FORMAT}", "format")
    head = top.table("brain", needed=True)
    name = head.get("name", as_name, '"a name"')
    atlas = top.table("atlas", needed=True)
    atlas_path = atlas.path("path")
    stack = _stack(top.table("stack", needed=True))
    penetrations = tuple(_penetration(t) for t in top.tables("penetration", "penetration"))
    if not penetrations:
        top.fault("no penetration is described", "Add a [[penetration]] with name and probe")
    _unique((p.name for p in penetrations), top, "penetration")
    anchors = tuple(a for t in top.tables("anchor", "anchor") if (a := _anchor(t, penetrations)) is not None)
    knowledge = top.table("knowledge")
    knowledge_path = knowledge.path("path", None, folder_ok=False)
    settings = _settings(top.table("settings"))
    for table in (head, atlas, knowledge, top):
        table.finish()
    return Brain(file, name or "", atlas_path or file, stack, penetrations, anchors, knowledge_path, settings)


def _stack(table: _Table) -> StackSource:
    source = StackSource(
        background=table.path("background") or Path(),
        dye=table.path("dye", None),
        background_channel=table.get("background_channel", as_whole, "0, 1, 2 …", 0),
        dye_channel=table.get("dye_channel", as_whole, "0, 1, 2 …", 0),
        voxel_um=table.get("voxel_um", as_triple_positive, "three sizes in um, such as [8.0, 4.0, 4.0]", None),
        code=table.get("orientation", orientation, 'a three-letter code such as "PIR"', None),
    )
    table.finish()
    return source


def _penetration(table: _Table) -> Penetration:
    name = table.get("name", as_name, '"a name"')
    if name:
        table.where = f"{table.where.rpartition(',')[0]}, penetration {name}"
    recordings = tuple(_recording(t) for t in table.tables("recording", "recording"))
    penetration = Penetration(
        name=name or "",
        probe=table.path("probe", folder_ok=False) or Path(),
        tip_offset_um=table.get("tip_offset_um", as_number, "a number of um", 0.0),
        entry_near_um=table.get("entry_near_um", as_triple, "[ap, dv, ml] in atlas um", None),
        points=table.path("points", None, folder_ok=False),
        inserted_um=table.get("inserted_um", as_positive, "a positive number of um", None),
        shank_toward=table.get("shank_toward", as_toward, 'one of "A", "P", "S", "I", "R", "L"', None),
        unit_table=table.path("unit_table", None, folder_ok=False),
        recordings=recordings,
        probe_index=table.get("probe_index", as_whole, "0, 1, 2 …: which probe of the probe file", None),
    )
    table.finish()
    return penetration


def _recording(table: _Table) -> RecordingSource:
    source = RecordingSource(
        lfp=table.path("lfp", None, folder_ok=False),
        sampling_hz=table.get("sampling_hz", as_positive, "samples a second, such as 2500.0", None),
        n_channels=table.get("n_channels", as_count, "the number of traces, such as 384", None),
        dtype=table.get("dtype", as_dtype, '"int16" or "float32"', None),
        uv_per_bit=table.get("uv_per_bit", as_positive, "microvolts a bit, such as 4.69", None),
        spikes=table.path("spikes", None, folder_ok=False),
        events=table.path("events", None, folder_ok=False),
        exclude=table.path("exclude", None, folder_ok=False),
        skip_channels=table.get("skip_channels", as_whole_list, "a list of trace numbers, such as [384]", ()),
        lfp_series=table.get("lfp_series", as_text, '"the name of an electrical series of the NWB file"', None),
        probe=table.path("probe", None, folder_ok=False),
        probe_index=table.get("probe_index", as_whole, "0, 1, 2 …: which probe of the recording's probe file", None),
    )
    table.finish()
    if source.lfp is None and source.spikes is None:
        table.fault("names neither lfp nor spikes", 'Write lfp = "…" or spikes = "…"')
    if source.probe_index is not None and source.probe is None and "probe" not in table.values:
        table.fault(
            "'probe_index' chooses from a probe file, and the recording names none", "Write probe, or leave it out"
        )
    in_nwb = source.lfp is not None and source.lfp.suffix.lower() == ".nwb"
    if source.lfp_series is not None and not in_nwb:
        table.fault("'lfp_series' names a series inside an NWB file, and lfp is none", "Leave it out")
    if source.lfp is not None and not in_nwb:
        flat = {"sampling_hz": source.sampling_hz, "n_channels": source.n_channels, "dtype": source.dtype}
        for key in (k for k, value in flat.items() if value is None and k not in table.values):
            table.fault(f"'{key}' is missing", f"A flat recording needs {', '.join(flat)} and uv_per_bit")
        if source.dtype == "int16" and source.uv_per_bit is None and "uv_per_bit" not in table.values:
            table.fault("'uv_per_bit' is missing", "Write the microvolts of one bit, such as uv_per_bit = 4.69")
    return source


def _anchor(table: _Table, penetrations: tuple[Penetration, ...]) -> Anchor | None:
    values = {
        "penetration": table.get("penetration", as_text, '"the name of a penetration"'),
        "shank": table.get("shank", as_whole, "0, 1, 2 …", 0),
        "tip_distance_um": table.get("tip_distance_um", as_number, "a number of um"),
        "track_depth_um": table.get("track_depth_um", as_number, "a number of um"),
        "sd_um": table.get("sd_um", as_positive, "a positive number of um", 40.0),
        "landmark": table.get("landmark", as_text, '"the name of a landmark"', ""),
        "note": table.get("note", as_text, '"any text"', ""),
    }
    table.finish()
    names = [p.name for p in penetrations]
    if values["penetration"] is not None and values["penetration"] not in names:
        table.fault(f"there is no penetration '{values['penetration']}'", nearest(values["penetration"], names))
        return None
    if any(value is None for value in values.values()):
        return None
    return Anchor(**values)


def _settings(table: _Table) -> Settings:
    stages = {}
    for stage in dataclasses.fields(Settings):
        part = table.table(stage.name)
        kind = get_type_hints(Settings)[stage.name]
        default = kind()
        types = get_type_hints(kind)
        chosen = {}
        for key in dataclasses.fields(kind):
            usual = getattr(default, key.name)
            chosen[key.name] = part.get(key.name, _like(usual), _like_words(types[key.name]), usual)
        part.finish()
        stages[stage.name] = kind(**chosen)
    table.finish()
    return Settings(**stages)


def _like(default: object) -> Callable[[Any], Any]:
    """The check that keeps a setting of the kind that its default is."""
    if isinstance(default, bool):
        return as_boolean
    if isinstance(default, int):
        return as_whole
    if isinstance(default, float):
        return as_not_negative
    if default == ():
        return as_word_pairs
    if isinstance(default, tuple):
        return as_increasing_pair
    return as_text


def _like_words(kind: object) -> str:
    words: dict[object, str] = {
        bool: "true or false",
        int: "a whole number",
        float: "a number that is not negative",
        str: '"a text"',
        tuple[tuple[str, str], ...]: 'a table of words, such as { ACRONYM = "name" }',
    }
    return words.get(kind, "two increasing numbers, such as [4.0, 12.0]")


def _unique(names: Iterable[str], table: _Table, what: str) -> None:
    seen: set[str] = set()
    for name in names:
        if name and name.casefold() in seen:
            table.fault(f"two {what}s are named '{name}'", "Give each a name of its own (capitals do not count)")
        seen.add(name.casefold())


def _neighbours(path: Path) -> str:
    if not os.path.isdir(path.parent):
        return f"There is no folder {path.parent} either; paths are relative to brain.toml"
    return f"Paths are relative to brain.toml. {nearest(path.name, [p.name for p in path.parent.iterdir()])}"

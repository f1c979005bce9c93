"""What is known beforehand of each type of structure, from ``knowledge.toml`` or a lab's own text.

The numbers are weak prior means; structures of unknown type have mean 0 and learn from the recording alone.
"""

from __future__ import annotations

import re
import tomllib
from dataclasses import dataclass, field, fields, replace
from functools import cache
from importlib.resources import files
from math import isfinite
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

from leadline.base.errors import MALFORMED, LeadlineError, nearest
from leadline.model.profile import FEATURE_BY_NAME

if TYPE_CHECKING:
    from collections.abc import Mapping

    from leadline.model.atlas import Structure, Structures

FORMAT = 1
UNKNOWN_SD = 0.9
RULES = ("tissue", "layer", "name_has", "under", "not_under")


@dataclass(frozen=True, slots=True)
class DepthLaw:
    """How far probe um in vivo stray from atlas um along a track.

    ``offset_sd_um`` : of the tip against the dye's end; with probability ``stray_share`` it is
    ``stray_offset_sd_um``, because the dye's end was not the tip at all. ``scale_sd`` : of the whole. ``slope_sd``
    over ``slope_length_um`` : local stretch. ``border_sd_um`` over ``border_length_um`` : the animal's borders
    against the atlas's.
    """

    offset_sd_um: float = 130.0
    stray_offset_sd_um: float = 350.0
    stray_share: float = 0.12
    scale_sd: float = 0.065
    slope_sd: float = 0.09
    slope_length_um: float = 700.0
    border_sd_um: float = 30.0
    border_length_um: float = 250.0


@dataclass(frozen=True, slots=True)
class StructureType:
    """A kind of structure: the rules that recognise it, and what its features tend to be.

    ``mean`` : feature name -> prior mean in standard deviations of the feature along a track. ``sd`` : of the type's
    mean in another animal. ``instance_sd`` : between structures of the type.
    """

    name: str
    words: str
    rules: Mapping[str, tuple[str, ...]]
    mean: Mapping[str, float]
    sd: float = 0.6
    instance_sd: float = 0.35
    source: str = ""

    def matches(self, structure: Structure, lineage: str) -> bool:
        """Whether every rule holds; ``lineage`` : names of the structure and its ancestors, small letters."""
        layer = re.sub(r"^layer\s*", "", structure.layer.strip().lower())
        own = structure.name.lower()
        checks = {
            "tissue": lambda words: structure.tissue in words,
            "layer": lambda words: layer in words,
            "name_has": lambda words: any(_has(own, structure.acronym, layer, w) for w in words),
            "under": lambda words: any(w in lineage for w in words),
            "not_under": lambda words: not any(w in lineage for w in words),
        }
        return all(checks[rule](words) for rule, words in self.rules.items())


@dataclass(frozen=True)
class Knowledge:
    """All types, in the order in which they are tried, and the law of depth."""

    types: tuple[StructureType, ...]
    depth: DepthLaw = field(default_factory=DepthLaw)

    def of(self, structures: Structures, structure_id: int) -> StructureType | None:
        """The first type that matches a structure, or None for one of unknown type."""
        if structure_id not in structures:
            return None
        chain = structures.ancestry(structure_id)
        lineage = " | ".join(row.name for row in chain).lower()
        return next((t for t in self.types if t.matches(chain[0], lineage)), None)

    def merged(self, other: Knowledge) -> Knowledge:
        """This knowledge with types of ``other`` put in place of those of the same name, new ones tried first."""
        ours = {t.name for t in self.types}
        theirs = {t.name: t for t in other.types}
        fresh = tuple(t for t in other.types if t.name not in ours)
        return Knowledge(fresh + tuple(theirs.get(t.name, t) for t in self.types), other.depth)


@cache
def builtin() -> Knowledge:
    """What is published, from the file that comes with the program."""
    source = files("leadline.anchoring").joinpath("knowledge.toml")
    return parse(source.read_text(encoding="utf-8"), "knowledge.toml", base=Knowledge(()))


def parse(text: str, where: str, *, base: Knowledge | None = None) -> Knowledge:
    """Read knowledge from TOML text and merge it over ``base`` (the built-in knowledge when not given).

    A type that names rules of its own stands for itself; one that repeats a known name may leave the rules out and
    keeps those of the known type. Raises LeadlineError that names the key and the nearest known one.
    """
    try:
        table = tomllib.loads(text)
    except MALFORMED as error:
        raise LeadlineError(f"is no TOML: {error}", where=where, mend="Correct the line it names") from error
    under = builtin() if base is None else base
    _known(table, ("format", "depth", "type", "learned"), where)
    if table.get("format") != FORMAT:
        raise LeadlineError(
            f"format is {table.get('format')!r}", where=where, mend=f"This version reads format = {FORMAT}"
        )
    law = replace(under.depth, **_depth(table.get("depth", {}), f"{where} [depth]"))
    known = {t.name: t for t in under.types}
    rows = table.get("type", [])
    if not isinstance(rows, list):
        raise LeadlineError("type is no list of tables", where=where, mend="Write [[type]]")
    types = tuple(_type(row, f"{where} type {i + 1}", known) for i, row in enumerate(rows))
    return under.merged(Knowledge(types, law))


def _type(row: dict[str, Any], where: str, known: Mapping[str, StructureType]) -> StructureType:
    _known(row, ("name", "words", "sd", "instance_sd", "source", "mean", *RULES), where)
    name = row.get("name")
    if not isinstance(name, str) or not name:
        raise LeadlineError("has no name", where=where, mend='Write name = "…"')
    where = f"{where} ({name})"
    rules = {rule: tuple(str(w).lower() for w in row[rule]) for rule in RULES if rule in row}
    old = known.get(name)
    if not rules and old is None:
        raise LeadlineError("has no rule to recognise it by", where=where, mend=f"Give one of {', '.join(RULES)}")
    mean = {key: _number(value, f"{where} mean.{key}") for key, value in row.get("mean", {}).items()}
    _known(mean, tuple(FEATURE_BY_NAME), f"{where} mean")
    sd, instance = (_number(row.get(k, d), f"{where} {k}") for k, d in (("sd", 0.6), ("instance_sd", 0.35)))
    if min(sd, instance) <= 0:
        raise LeadlineError("sd and instance_sd must be positive", where=where, mend="0.3 to 0.9 are usual")
    return StructureType(
        name,
        str(row.get("words", old.words if old else name)),
        MappingProxyType(rules or dict(old.rules if old else {})),
        MappingProxyType(mean),
        sd,
        instance,
        str(row.get("source", "")),
    )


def _depth(table: dict[str, Any], where: str) -> dict[str, float]:
    _known(table, tuple(f.name for f in fields(DepthLaw)), where)
    found = {key: _number(value, f"{where} {key}") for key, value in table.items()}
    for key, value in found.items():
        if value <= 0 or (key == "stray_share" and value >= 1):
            raise LeadlineError(f"{key} is {value:g}", where=where, mend="Write a positive number")
    return found


def _number(value: object, where: str) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not isfinite(value):
        raise LeadlineError(f"{value!r} is no number", where=where, mend="Write a finite number")
    return float(value)


def _known(table: Mapping[str, object], names: tuple[str, ...], where: str) -> None:
    for key in table:
        if key not in names:
            raise LeadlineError(f"'{key}' is no known key", where=where, mend=nearest(key, names))


def _has(own: str, acronym: str, layer: str, word: str) -> bool:
    """A long word anywhere in the name; a short one as the layer, or at the end of the acronym."""
    return word in own if len(word) > 3 else layer == word or acronym.lower().endswith(word)

"""Layer and tissue of a structure, from its name and its ancestry; atlases say neither in so many words."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import TYPE_CHECKING

from leadline.model.atlas import Structure, Structures

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

_ROMAN = {"i": "1", "ii": "2", "iii": "3", "iv": "4", "v": "5", "vi": "6"}
_ONE = r"(?:[1-6]|iv|vi|v|iii|ii|i)[abc]?"
_LAYER = re.compile(rf"\blayers?\s+({_ONE}(?:\s*[/\-–]\s*{_ONE})?)(?![\w/\-–]|\s*(?:and|to|&|,)\s*[1-6iv])", re.I)
_SHORT_LAYER = re.compile(r"\bL([1-6][abc]?(?:[/\-–][1-6][abc]?)?)$")
_SUFFIX = re.compile(r"[-_ ]?L?([1-6][abc]?(?:/[1-6])?)")

_GREY = re.compile(r"\b(nucle(us|i)|gangli(on|a)|gr[ea]y matter)\b(?! related)")
_TISSUE_ZONE = re.compile(r"\b(ventricular|subventricular|subependymal|periventricular) zone\b")
_GREY_BY_NAME = re.compile(r"\b(area|areas|cortex|complex|zone|region|field)\b")
_WHITE_ROOT = re.compile(r"\b(fib(er|re)s?|white matter)\b")
_WHITE = re.compile(
    r"\b(tract(s|us)?|corpus callosum|callosal|capsules?|commissures?|"
    r"fascicul(us|i)|bundles?|peduncles?|lemnisc(us|i)|fornix|alveus|fimbria|cingulum|stria|chiasma?|nerv(es?|us|i)|"
    r"decussations?|forceps|brachium|funicul(us|i)|radiations?|corona radiata|arbor vitae|medullary lamina|"
    r"path(ways?)?|ansa|white layer)\b|^pyramid$"
)
_VENTRICLE = re.compile(
    r"\b(ventricles?|ventricular systems?|(cerebral |mesencephalic )?aqueduct|central canal|"
    r"interventricular foramen|choroid plexus|cerebrospinal fluid|csf|rhinocele|cisterns?|subarachnoid space)\b"
)
_OUTSIDE = re.compile(r"^(background|exterior|clear label|outside( (of )?the brain)?)$")

_HIPPOCAMPAL = re.compile(r"\b(hippocamp\w*|ammon\S*|ca[1-4]|subicul\w*|fascia dentata|dentate gyrus)\b")
_DENTATE = re.compile(r"\b(dentate gyrus|fascia dentata)\b")
_NO_CORTEX = re.compile(
    r"\b(collicul\w+|tectum|cerebell\w+|olfactory bulb|spinal|midbrain|hindbrain|medulla|pons|thalam\w+|retina\w*|"
    r"hippocamp(us|al region)|ammon\S*|dentate)\b"
)
_CORTEX = re.compile(r"\b(\w*cort(ex|ical)|pallium)\b")
_STRATA = (
    ("slm", re.compile(r"lacunosum|\bslm\b")),
    ("so", re.compile(r"\boriens\b")),
    ("sr", re.compile(r"\bradiatum\b")),
    ("slu", re.compile(r"\blucidum\b")),
    ("sp", re.compile(r"\bpyramidal( cell)? layer\b|\bstratum pyramidale\b")),
    ("mo", re.compile(r"\bmolecular layer\b")),
)
_DENTATE_STRATA = (
    ("mo", re.compile(r"\bmolecular(e)?\b")),
    ("sg", re.compile(r"\bgranul(e|ar)\b|\bgranulosum\b")),
    ("po", re.compile(r"\bpolymorph\w*\b|\bhilus\b")),
)


def derive(rows: Sequence[Structure], *, given: Iterable[str] = ()) -> tuple[Structure, ...]:
    """Fill ``layer`` and ``tissue`` of every row.

    Layers are those of cortex ('1', '2/3', '4', '5', '6a', ...), hippocampus ('so', 'sp', 'sr', 'slm', 'slu') and
    dentate gyrus ('mo', 'sg', 'po'). Tissue is inherited: what lies under the fibre tracts is white, what lies under
    the ventricles is ventricle, unless its own name says that it is a nucleus.

    Parameters
    ----------
    given : the columns that the table itself fills ('layer', 'tissue'); they are kept.

    Raises
    ------
    LeadlineError : the rows are no tree.
    """
    tree, given = Structures(tuple(rows)), set(given)
    tissues: dict[int, str] = {}
    for row in rows:
        for step in reversed(tree.ancestry(row.id)):
            tissues.setdefault(step.id, _tissue(step, tissues.get(step.parent_id or 0, "grey")))
    if "tissue" not in given:
        rows = [replace(row, tissue=tissues[row.id]) for row in rows]
    if "layer" not in given:
        suffixes = _suffix_layers(rows, tree)
        rows = [replace(row, layer=layer_of(row, tree) or suffixes.get(row.id, "")) for row in rows]
        rows = [replace(row, layer="") if row.tissue != "grey" else row for row in rows]
    return tuple(rows)


def _tissue(row: Structure, above: str) -> str:
    """Tissue of a row by its own name, else what is above it."""
    name = row.name.lower()
    if _OUTSIDE.search(name):
        return "outside"
    if _GREY.search(name) or _TISSUE_ZONE.search(name):
        return "grey"
    if _WHITE_ROOT.search(name):
        return "white"
    if _VENTRICLE.search(name):
        return "ventricle"
    if _WHITE.search(name) and not _GREY_BY_NAME.search(name):
        return "white"
    return above


def layer_of(row: Structure, tree: Structures) -> str:
    """Layer that a structure's name says it is; '' where it is none."""
    own = row.name.lower()
    lineage = " / ".join(step.name.lower() for step in tree.ancestry(row.id))
    if _HIPPOCAMPAL.search(lineage):
        strata = _DENTATE_STRATA if _DENTATE.search(lineage) else _STRATA
        found = [layer for layer, pattern in strata if pattern.search(own)]
        if found:
            return found[0] if len(found) == 1 and "nucle" not in own else ""
    if _NO_CORTEX.search(lineage):
        return ""
    said = _LAYER.search(row.name) or (_SHORT_LAYER.search(row.name) if _CORTEX.search(lineage) else None)
    return _number(said.group(1)) if said else ""


def _number(text: str) -> str:
    """One way to write a layer; '' for more than two neighbouring layers.

    Examples
    --------
    >>> _number("II-III"), _number("VIa"), _number("1-6")
    ('2/3', '6a', '')
    """
    parts = [part.strip().lower() for part in re.split(r"[/\-–]", text)]
    plain = []
    for part in parts:
        sub = part[-1] if part[-1] in "abc" else ""
        main = part.removesuffix(sub)
        plain.append((_ROMAN.get(main, main), sub))
    if len(plain) == 2 and int(plain[1][0]) - int(plain[0][0]) not in (0, 1):
        return ""
    return "/".join(main + sub for main, sub in plain)


def _suffix_layers(rows: Sequence[Structure], tree: Structures) -> dict[int, str]:
    """Layers that only the acronym tells: an area's acronym with a number behind it.

    Areas are numbered too, so this counts only in the cortex and only where the siblings are a whole set: 1, 2 or
    2/3, and 5.
    """
    by_parent: dict[int, dict[int, str]] = {}
    for row in rows:
        parent = None if row.parent_id is None else tree[row.parent_id]
        if parent is None or len(parent.acronym) < 2 or not row.acronym.startswith(parent.acronym):
            continue
        suffix = _SUFFIX.fullmatch(row.acronym.removeprefix(parent.acronym))
        lineage = " / ".join(step.name.lower() for step in tree.ancestry(row.id))
        if suffix and _CORTEX.search(lineage) and not _NO_CORTEX.search(lineage):
            by_parent.setdefault(parent.id, {})[row.id] = suffix.group(1)
    found: dict[int, str] = {}
    for layers in by_parent.values():
        present = {layer.rstrip("abc") for layer in layers.values()}
        if {"1", "5"} <= present and present & {"2", "2/3"}:
            found |= layers
    return found

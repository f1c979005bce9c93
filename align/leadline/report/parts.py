"""Small parts of the page, each from findings to escaped HTML."""

from __future__ import annotations

import json
from html import escape
from itertools import groupby
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

    from leadline.report.findings import Findings, Shank


def cards(findings: Findings) -> str:
    """The few numbers that one looks for first."""
    table = findings.channels
    inside = table[table["in_brain"].fillna(False).astype(bool)]
    shown = [
        (f"{(n := table['penetration'].nunique())}", "penetration" if n == 1 else "penetrations"),
        (f"{len(inside)} of {len(table)}", "channels in the brain"),
        (f"{inside['region'].nunique()}", f"regions, {inside['coarse_region'].nunique()} coarse"),
        (_number(table["track_depth_sd_um"].median(), 0, " um"), "median sd of depth"),
        (_number(inside["p_region"].median(), 2), "median probability of the region"),
        (_number(findings.registration.error_um, 0, " um"), "estimated error of registration"),
    ]
    return (
        '<div class="cards">'
        + "".join(f'<div class="card"><b>{b}</b><span>{s}</span></div>' for b, s in shown)
        + "</div>"
    )


def strata_line(findings: Findings) -> str:
    """What each penetration went through, from the surface down."""
    lines = []
    for name, number in findings.shanks():
        shank = findings.shank(name, number)
        rows = shank.channels[shank.channels["in_brain"].fillna(False).astype(bool)]
        passed = dict.fromkeys(str(r) for r in rows["coarse_region"].iloc[::-1])
        path = " → ".join(escape(region) for region in passed) or "not located"
        lines.append(f"<dt>{escape(shank.title)}</dt><dd>{path}</dd>")
    return "<h3>From the surface down</h3><dl>" + "".join(lines) + "</dl>"


def warnings(findings: Findings) -> str:
    """Every warning of the run, or that there is none."""
    found = list(dict.fromkeys([*findings.warnings, *findings.registration.warnings]))
    if not found:
        return '<p class="note">None.</p>'
    return '<ul class="warnings">' + "".join(f"<li>{escape(w)}</li>" for w in found) + "</ul>"


def quality(findings: Findings) -> str:
    """The numbers of ``qc.json``."""
    rows = [("error_um", f"{findings.registration.error_um:g}")]
    rows += [(k, _plain(v)) for k, v in findings.registration.quality.items()]
    return "<h3>Numbers</h3>" + _definitions(rows, columns=True)


def strata_table(findings: Findings, shank: Shank) -> str:
    """Runs of channels in one region, from the surface down."""
    table = shank.channels.iloc[::-1]
    keys = table["region_id"].fillna(-1).astype(np.int64).tolist()
    body = []
    for _, run in groupby(range(len(table)), key=lambda i: keys[i]):
        rows = table.iloc[list(run)]
        first = rows.iloc[0]
        cells = [
            chip(findings, first["region_id"]) + escape(str(first["region"])),
            escape(str(first["region_name"])),
            escape(str(first["layer"] or "")),
            f"{len(rows)}",
            _range(rows["track_depth_um"]),
            _range(rows["tip_distance_um"]),
            _number(rows["p_region"].mean(), 2),
            escape(", ".join(dict.fromkeys(str(b) for b in rows["basis"]))),
        ]
        numeric = (3, 4, 5, 6)
        body.append("<tr>" + "".join(f"<td{_class(k in numeric)}>{c}</td>" for k, c in enumerate(cells)) + "</tr>")
    heads = ("region", "name", "layer", "channels", "track depth, um", "tip distance, um", "mean p_region", "basis")
    top = "".join(f'<th scope="col"{_class(k in (3, 4, 5, 6))}>{h}</th>' for k, h in enumerate(heads))
    return (
        '<h3>Strata, from the surface down</h3><div class="scroll"><table><thead><tr>'
        + top + "</tr></thead><tbody>" + "".join(body) + "</tbody></table></div>"
    )  # fmt: skip


def anchor_table(shank: Shank) -> str:
    """Anchors in force, and those that the recording suggests, with what speaks for and against them."""
    rows = [
        (a.landmark or a.note, a, "in force" if a.source == "user" else "in force, accepted", "", "")
        for a in shank.anchors
    ]
    rows += [(s.anchor.landmark, s.anchor, "suggested", s.support, s.against) for s in shank.suggestions]
    if not rows:
        return '<p class="note">No anchors, and none suggested.</p>'
    body = "".join(
        f'<tr><td class="wrap">{escape(name)}</td><td class="n">{a.tip_distance_um:.0f}</td>'
        f'<td class="n">{a.track_depth_um:.0f}</td><td class="n">{a.sd_um:.0f}</td><td>{state}</td>'
        f'<td class="wrap">{escape(support)}</td><td class="wrap">{escape(against)}</td></tr>'
        for name, a, state, support, against in rows
    )
    heads = ("anchor", "tip distance, um", "track depth, um", "sd, um", "state", "for it", "against it")
    top = "".join(f'<th scope="col"{_class(k in (1, 2, 3))}>{h}</th>' for k, h in enumerate(heads))
    return (
        f'<h3>Anchors</h3><div class="scroll"><table><thead><tr>{top}</tr></thead><tbody>{body}</tbody></table></div>'
    )


def settings(findings: Findings) -> str:
    """Settings of every stage, versions, and the fingerprint of each input."""
    record = findings.provenance
    stages = "".join(
        f"<div><h3>{escape(str(stage))}</h3>" + _definitions((k, _plain(v)) for k, v in values.items()) + "</div>"
        for stage, values in record["settings"].items()
    )
    versions: Mapping[str, Any] = {"leadline": record["leadline"], **record["versions"]}
    return (
        f'<div class="columns">{stages}<div><h3>versions</h3>'
        + _definitions((k, str(v)) for k, v in versions.items())
        + "</div></div><h3>fingerprints of the inputs</h3>"
        + _definitions((k, str(v)) for k, v in record["inputs"].items())
    )


def citation(findings: Findings) -> str:
    """How the atlas' makers ask to be cited, and what to say of the method."""
    atlas = findings.bench.atlas
    licence = f" Licence: {escape(atlas.licence)}." if atlas.licence else ""
    cited = escape(atlas.citation) if atlas.citation else "The atlas folder states no citation; ask its makers."
    return (
        f"<p><b>{escape(atlas.name)}.</b> {cited}{licence}</p>"
        f'<p class="note">Regions were assigned with Leadline {escape(str(findings.provenance["leadline"]))}. In a '
        "paper, name the atlas and its version, the estimated error of registration, the median sd of depth, how many "
        "anchors were set by hand, and whether the recording was used to infer depth.</p>"
    )


def chip(findings: Findings, region_id: Any) -> str:
    """A small square in the region's colour."""
    if region_id is None or region_id != region_id or int(region_id) not in findings.bench.atlas.structures:
        return ""
    return f'<i class="chip" style="background:{findings.bench.atlas.structures[int(region_id)].colour}"></i>'


def _definitions(rows: Iterable[tuple[str, str]], *, columns: bool = False) -> str:
    text = "".join(f"<dt>{escape(key)}</dt><dd>{escape(value)}</dd>" for key, value in rows)
    return f'<dl class="short">{text}</dl>' if columns else f"<dl>{text}</dl>"


def _plain(value: Any) -> str:
    if isinstance(value, list | tuple):
        return ", ".join(_plain(v) for v in value)
    if isinstance(value, float):
        return f"{value:.5g}"
    return value if isinstance(value, str) else json.dumps(value, ensure_ascii=False, default=str)


def _number(value: Any, digits: int, unit: str = "") -> str:
    return f"{float(value):.{digits}f}{unit}" if value == value else "–"


def _range(values: Any) -> str:
    low, high = values.min(), values.max()
    if low != low:
        return ""
    return f"{low:.0f}" if round(low) == round(high) else f"{low:.0f} to {high:.0f}"


def _class(numeric: bool) -> str:
    return ' class="n"' if numeric else ""

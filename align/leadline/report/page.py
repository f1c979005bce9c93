"""``leadline report``: one self-contained page of a brain that works offline, prints well and escapes everything."""

from __future__ import annotations

import io
from base64 import b64encode
from html import escape
from importlib.resources import files
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.atomic import write_text
from leadline.base.progress import SILENT, Progress
from leadline.pipeline.provenance import CAUTION
from leadline.report import parts, style
from leadline.report.figures import draw_section
from leadline.report.planes import CheckPlane, check_planes

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    import pandas as pd

    from leadline.report.findings import Findings, Shank

LARGEST_BYTES = 5_000_000
PICTURES_BYTES = 3_100_000
TABLE_BYTES = 1_300_000
PICTURE_DPI = (150, 110, 80, 60, 45)
TABLE_COLUMNS = (
    "penetration",
    "shank",
    "channel",
    "tip_distance_um",
    "track_depth_um",
    "track_depth_sd_um",
    "region",
    "region_name",
    "layer",
    "p_region",
    "coarse_region",
    "p_coarse",
    "boundary_um",
    "ap_um",
    "dv_um",
    "ml_um",
    "basis",
)
CHIEF_COLUMNS = ("penetration", "shank", "channel", "tip_distance_um", "track_depth_um", "region", "layer", "p_region")
NUMBERS = {
    "shank": 0,
    "channel": 0,
    "tip_distance_um": 0,
    "track_depth_um": 0,
    "track_depth_sd_um": 0,
    "p_region": 2,
    "p_coarse": 2,
    "boundary_um": 0,
    "ap_um": 0,
    "dv_um": 0,
    "ml_um": 0,
}


def write_report(findings: Findings, path: Path, progress: Progress = SILENT) -> int:
    """Write the page; returns its length in bytes, which is below five million."""
    text = page(findings, progress)
    write_text(path, text)
    return len(text.encode("utf-8"))


def page(findings: Findings, progress: Progress = SILENT) -> str:
    """The whole page as text. Every word that comes from the user's files is escaped."""
    name = escape(findings.brain.name)
    shanks = [findings.shank(*key) for key in findings.shanks()]
    pictures = section_pictures(findings, shanks, progress)
    sections = [
        _section("summary", "Summary", parts.cards(findings) + parts.strata_line(findings)),
        _section("warnings", "Warnings", parts.warnings(findings)),
        _section("registration", "Registration", _registration(findings, check_planes(findings))),
        *(_penetration(findings, shank, picture) for shank, picture in zip(shanks, pictures, strict=True)),
        _section("channels", "Channels", _channels(findings.channels, findings)),
        _section("settings", "Settings and versions", parts.settings(findings)),
        _section("cite", "How to cite", parts.citation(findings)),
    ]
    links = [("summary", "Summary"), ("warnings", "Warnings"), ("registration", "Registration")]
    links += [(_anchor(s), f"Penetration {s.title}") for s in shanks]
    links += [("channels", "Channels"), ("settings", "Settings"), ("cite", "How to cite")]
    nav = "".join(f'<a href="#{escape(key)}">{escape(title)}</a>' for key, title in links)
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta http-equiv="Content-Security-Policy" content="default-src \'none\'; img-src data:; '
        "style-src 'unsafe-inline'; script-src 'unsafe-inline'\">\n"
        f"<title>{name}: channels in the brain</title>\n<style>\n{_file('page.css')}</style>\n</head>\n<body>\n"
        f"<header><h1>{name}</h1><p>In which region and layer every channel sat; atlas: "
        f'{escape(findings.bench.atlas.name)}</p><p class="caution">{escape(CAUTION)}</p></header>\n'
        f'<nav aria-label="Parts of the page">{nav}</nav>\n<main>\n'
        + "\n".join(sections)
        + f"\n</main>\n<footer>Leadline {escape(str(findings.provenance['leadline']))}. {escape(CAUTION)}</footer>\n"
        + f"<script>\n{_file('page.js')}</script>\n</body>\n</html>\n"
    )


def section_pictures(findings: Findings, shanks: list[Shank], progress: Progress = SILENT) -> list[str]:
    """The section figure of every located shank as a data URI, '' where a shank is not located.

    Figures are vector graphics, or pixels as fine as the page's limit allows where there are many shanks.
    """
    progress.begin("report", len(shanks))
    figures = []
    for shank in shanks:
        figures.append(draw_section(findings, shank) if shank.located else None)
        progress.step()
    for dpi in (None, *PICTURE_DPI):
        found = ["" if figure is None else _uri(figure, dpi) for figure in figures]
        if sum(map(len, found)) <= PICTURES_BYTES:
            break
    return found


def _uri(figure: Any, dpi: int | None) -> str:
    with style.drawing(), io.BytesIO() as buffer:
        if dpi is None:
            figure.savefig(buffer, format="svg", metadata={"Date": None}, dpi=130)
        else:
            figure.savefig(buffer, format="png", dpi=dpi)
        kind = "svg+xml" if dpi is None else "png"
        return f"data:image/{kind};base64," + b64encode(buffer.getvalue()).decode("ascii")


def _section(key: str, title: str, body: str) -> str:
    return f'<section id="{escape(key)}"><h2>{escape(title)}</h2>{body}</section>'


def _registration(findings: Findings, planes: list[CheckPlane]) -> str:
    pictures = "".join(
        f'<figure style="flex: {p.width / p.height:.4f} 1 0"><div class="swipe">'
        f'<img src="{p.template}" alt="atlas template, {escape(p.title)}">'
        f'<img class="stack" src="{p.stack}" alt="stack carried to the atlas, {escape(p.title)}">'
        f'<svg viewBox="0 0 {p.width} {p.height}" preserveAspectRatio="none" aria-hidden="true">'
        f'<path d="{p.outlines}"/>' + "".join(f'<polyline points="{t}"/>' for t in p.tracks) + "</svg></div>"
        f"<figcaption>{escape(p.title)}</figcaption></figure>"
        for p in planes
    )
    return (
        '<div class="bar"><label>atlas <input type="range" id="cut" min="0" max="100" value="50" '
        'aria-label="share of the picture that shows the stack"> stack</label>'
        '<label><input type="checkbox" id="lines" checked> region outlines</label></div>'
        f'<div class="planes">{pictures}</div>'
        '<p class="note">Left of the white line the stack, carried to the atlas; right of it the template. Yellow: '
        "outlines of the atlas. Pink: tracks, projected. Where tissue and outlines part, channels are off by as "
        "much.</p>" + parts.quality(findings)
    )


def _anchor(shank: Shank) -> str:
    return "shank-" + "".join(c if c.isalnum() else "-" for c in f"{shank.penetration}-{shank.shank}")


def _penetration(findings: Findings, shank: Shank, picture: str) -> str:
    head = f'<section class="penetration" id="{_anchor(shank)}"><h2>Penetration {escape(shank.title)}</h2>'
    if not shank.located:
        names = (f"'{shank.penetration}'", f"penetration {shank.penetration}:")
        why = next((m for m in findings.missing if any(n in m for n in names)), "no track was found for it")
        return f'{head}<p class="note">Not located: {escape(why)}</p></section>'
    alt = f"section of {shank.title}: tissue, strata, ties, physiology and odds of regions by depth"
    return (
        f'{head}<img class="section-figure" src="{picture}" alt="{escape(alt)}">'
        '<p class="note">On one scale, from left: the tissue along the track (dye in orange); the atlas along it; '
        "ties from contacts to their places (dots: anchors, dashed: suggested); what was recorded; and how likely "
        "each region is at every contact.</p>"
        + parts.strata_table(findings, shank)
        + parts.anchor_table(shank)
        + "</section>"
    )


def _channels(table: pd.DataFrame, findings: Findings) -> str:
    columns, kept = fitting_rows(table, findings)
    heads = "".join(
        f'<th scope="col"{_number_class(c)}><button type="button">{escape(c)}</button></th>' for c in columns
    )
    options = "".join(f"<option>{escape(str(p))}</option>" for p in dict.fromkeys(table["penetration"]))
    rows = "\n".join(kept)
    left_out = (
        f"The first {len(kept)} of {len(table)} channels; all of them, and all" if len(kept) < len(table) else "All"
    )
    return (
        '<div class="bar"><label>find <input type="search" id="find" placeholder="region, layer, channel …"></label>'
        f'<label>penetration <select id="which"><option value="">all</option>{options}</select></label>'
        '<span id="count" role="status"></span></div>'
        f'<div class="scroll"><table id="channel-table"><thead><tr>{heads}</tr></thead><tbody>\n{rows}\n'
        "</tbody></table></div>"
        f'<p class="note">{left_out} columns stand in channels.csv and channels.parquet. p_region is the '
        "probability, given all modelled error, that the named region is right.</p>"
    )


def fitting_rows(table: pd.DataFrame, findings: Findings) -> tuple[list[str], list[str]]:
    """Columns and rows of the channel table as the page's limit allows: all columns, else the chief ones, and of a
    table too long even so, the first channels."""
    by_fractions = any(str(source).startswith("fractions") for source in table.get("layer_source", ()))
    more = ("cortical_depth", "layer_source") if by_fractions else ("cortical_depth",)
    for wanted in ((*TABLE_COLUMNS, *more), CHIEF_COLUMNS):
        columns = [c for c in wanted if c in table.columns]
        rows = list(_rows(table, columns, findings))
        size = np.cumsum([len(row.encode("utf-8")) + 1 for row in rows])
        if not len(rows) or size[-1] <= TABLE_BYTES:
            return columns, rows
    return columns, rows[: int(np.searchsorted(size, TABLE_BYTES))]


def _rows(table: pd.DataFrame, columns: list[str], findings: Findings) -> Iterator[str]:
    classes = [_number_class(c) for c in columns]
    cells = [_texts(table[c], NUMBERS.get(c, 2 if c == "cortical_depth" else None)) for c in columns]
    where = columns.index("region")
    chips = [parts.chip(findings, i) for i in table["region_id"]]
    for row, chip in zip(zip(*cells, strict=True), chips, strict=True):
        marked = ((chip if k == where else "") + text for k, text in enumerate(row))
        yield "<tr>" + "".join(f"<td{c}>{text}</td>" for c, text in zip(classes, marked, strict=True)) + "</tr>"


def _texts(column: pd.Series, digits: int | None) -> list[str]:
    if digits is None:
        return ["" if v is None or v != v else escape(str(v)) for v in column]
    numbers = column.astype(float).to_numpy()
    return [f"{v:.{digits}f}" if np.isfinite(v) else "" for v in numbers]


def _number_class(column: str) -> str:
    return ' class="n"' if column in NUMBERS or column == "cortical_depth" else ""


def _file(name: str) -> str:
    return files("leadline.report").joinpath(name).read_text(encoding="utf-8")

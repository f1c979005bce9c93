"""``leadline compare``."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from leadline.cli.brains import Json, Quiet
from leadline.cli.terminal import out, out_json, terminal_progress

if TYPE_CHECKING:
    from leadline.pipeline.compare import Comparison, Reading

Side = "A brain.toml, its folder, or a channel table (.csv, .parquet)."


def add_to(app: typer.Typer) -> None:
    """Add the command."""
    app.command()(compare)


def compare(
    first: Annotated[Path, typer.Argument(help=Side, metavar="BRAIN_A")],
    second: Annotated[Path, typer.Argument(help=Side, metavar="BRAIN_B")],
    truth: Annotated[
        Path | None,
        typer.Option(help="A reference: penetration, channel, and track_depth_um, region, layer, ap_um, dv_um, ml_um."),
    ] = None,
    output: Annotated[
        Path | None, typer.Option("-o", "--output", help="Write comparison.csv, .png and .svg to this folder.")
    ] = None,
    json: Json = False,
    quiet: Quiet = False,
) -> None:
    """Compare two readings of one brain, channel by channel."""
    from leadline.pipeline.compare import compare as compare_readings
    from leadline.pipeline.compare import comparison_json, name_apart, read_reading

    with terminal_progress(quiet or json) as progress:
        readings = name_apart([(read_reading(p, progress), p) for p in (first, second)])
    found = [compare_readings(*readings)]
    if truth is not None:
        reference = read_reading(truth)
        found += [compare_readings(_named(reference, "truth"), reading) for reading in readings]
    files = [] if output is None else _write(found, readings[0], output)
    if json:
        keys = ("readings", "first_against_truth", "second_against_truth")
        said: dict[str, Any] = {key: comparison_json(c) for key, c in zip(keys, found, strict=False)}
        out_json({**said, "files": [str(f) for f in files]})
    elif not quiet:
        for comparison in found:
            _tell(comparison)
        for file in files:
            out(f"written: {file}")


def _named(reading: Reading, name: str) -> Reading:
    from dataclasses import replace

    return replace(reading, name=name)


def _tell(found: Comparison) -> None:
    out(f"{found.first} and {found.second}: {len(found.rows)} channels in both")
    if found.only_first or found.only_second:
        out(f"  only in {found.first}: {found.only_first}, only in {found.second}: {found.only_second}")
    d = found.difference
    if d.depth_abs_median_um is not None:
        out(f"  depth: {found.second} lies {d.depth_median_um:+.0f} um deeper (median)")
        out(f"  depth apart: {d.depth_abs_median_um:.0f} um (median), {d.depth_abs_p95_um:.0f} um (95th percentile)")
    if d.apart_median_um is not None:
        out(f"  in space: {d.apart_median_um:.0f} um apart (median), {d.apart_p95_um:.0f} um (95th percentile)")
    for name, agreement in found.agreement.items():
        kappa = "not defined" if agreement.kappa is None else f"{agreement.kappa:.3f}"
        out(f"  {name}: same in {100 * agreement.share:.1f} % of {agreement.channels}, Cohen's kappa {kappa}")


def _write(found: list[Comparison], reading: Reading, folder: Path) -> list[Path]:
    from leadline.io.tables import write_table
    from leadline.pipeline.atlas_import import load_atlas
    from leadline.pipeline.compare import comparison_rows
    from leadline.report.comparison import draw_comparison
    from leadline.report.style import save

    structures = None if reading.atlas is None else load_atlas(reading.atlas).structures
    files = []
    for stem, comparison in zip(("comparison", "first_against_truth", "second_against_truth"), found, strict=False):
        write_table(comparison_rows(comparison), folder / f"{stem}.csv")
        figure = draw_comparison(comparison, structures)
        for suffix in (".png", ".svg"):
            save(figure, folder / f"{stem}{suffix}")
        files += [folder / f"{stem}{suffix}" for suffix in (".csv", ".png", ".svg")]
    return files

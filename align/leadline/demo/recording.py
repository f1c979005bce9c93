"""Recordings of the invented brain as files: samples, spikes, events, intervals to leave out, and who sat where."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.base.progress import SILENT, Progress
from leadline.demo import lfp
from leadline.demo.structures import ids, kinds, structures
from leadline.demo.tissue import Tissue, make_tissue, own_codes
from leadline.demo.tracks import border_shift
from leadline.demo.units import make_units, spike_table

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence
    from pathlib import Path

    from leadline.demo.recipe import Recipe
    from leadline.demo.tracks import Shank, TruePenetration

UV_PER_BIT = 0.6
_ARTEFACT_S = (11.0, 13.5)
_FADE_S = 0.2
TRUTH_COLUMNS = (
    "penetration", "shank", "channel", "contact_id", "tip_distance_um", "track_depth_um", "ap_um", "dv_um", "ml_um",
    "region_id", "region", "coarse_region", "layer", "in_brain",
)  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class Faults:
    """Traces that are dead or noisy, and how far the probe slid up by the end of the recording."""

    scale: AnyArray
    noise_uv: AnyArray
    drift_um: float


def make_faults(recipe: Recipe, pen: TruePenetration) -> Faults:
    """A few bad traces in a kind recording, many and a drift in a rough one."""
    rng = np.random.default_rng([recipe.seed, 91, ord(pen.name[0])])
    n = pen.design.n_traces
    scale = rng.normal(1, 0.03, n)
    noise = 4.0 * rng.lognormal(0, 0.15, n)
    order = rng.permutation(n)
    dead, noisy = int(2 + 10 * recipe.rough), int(2 + 8 * recipe.rough)
    scale[order[:dead]], noise[order[:dead]] = 0.002, 0.4
    noise[order[dead : dead + noisy]] *= rng.uniform(8, 25, noisy)
    return Faults(scale, noise, recipe.rough * rng.uniform(15, 40))


def write_recording(folder: Path, recipe: Recipe, pen: TruePenetration, progress: Progress = SILENT) -> dict[str, Any]:
    """Write one recording; returns its table for ``brain.toml``."""
    name = pen.name.lower()
    timeline = lfp.make_timeline(recipe)
    tissues = [make_tissue(recipe, shank) for shank in pen.shanks]
    _write_samples(folder / f"{name}_lfp.bin", recipe, pen, tissues, timeline, progress)
    table: dict[str, Any] = {
        "lfp": f"{name}_lfp.bin",
        "sampling_hz": lfp.RATE_HZ,
        "n_channels": pen.design.n_traces,
        "dtype": "int16",
        "uv_per_bit": UV_PER_BIT,
    }
    table["spikes"] = _write_spikes(folder, recipe, pen, tissues, timeline)
    if pen.name != "C":
        rows = [(f"{t:.4f}", "flash") for t in timeline.flash_s]
        table["events"] = _csv(folder / f"{name}_events.csv", ("time_s", "kind"), rows)
    if _has_artefact(recipe, pen):
        table["exclude"] = _csv(folder / f"{name}_exclude.csv", ("start_s", "stop_s"), [_ARTEFACT_S])
    if pen.design.extra_traces:
        first = pen.design.n_traces - pen.design.extra_traces
        table["skip_channels"] = list(range(first, pen.design.n_traces))
    return table


def _has_artefact(recipe: Recipe, pen: TruePenetration) -> bool:
    return pen.name == "A" and recipe.seconds > 2 * _ARTEFACT_S[1]


def _csv(path: Path, columns: Sequence[str], rows: Iterable[Sequence[object]]) -> str:
    path.write_text("\n".join([",".join(columns), *(",".join(map(str, row)) for row in rows), ""]), "utf-8")
    return path.name


def _write_spikes(
    folder: Path, recipe: Recipe, pen: TruePenetration, tissues: list[Tissue], timeline: lfp.Timeline
) -> str:
    """Spikes as Parquet with tip distances (A), or as CSV with channels (the others)."""
    sites = pen.design.probe.recorded
    units = [
        make_units(recipe, shank, tissue, sites.tip_distance_um[sites.shank == shank.number])
        for shank, tissue in zip(pen.shanks, tissues, strict=True)
    ]
    table = spike_table(recipe, units, sites.channel, sites.tip_distance_um, sites.shank, timeline)
    name = pen.name.lower()
    if pen.name == "A":
        table.drop(columns="channel").to_parquet(folder / f"{name}_spikes.parquet", index=False)
        return f"{name}_spikes.parquet"
    table.drop(columns="tip_distance_um").to_csv(folder / f"{name}_spikes.csv", index=False)
    return f"{name}_spikes.csv"


def _write_samples(
    path: Path,
    recipe: Recipe,
    pen: TruePenetration,
    tissues: list[Tissue],
    timeline: lfp.Timeline,
    progress: Progress,
) -> None:
    """Time-major int16, block by block; blocks overlap and fade into each other with constant power."""
    faults = make_faults(recipe, pen)
    fade = round(_FADE_S * lfp.RATE_HZ)
    rise = np.sqrt((np.arange(fade, dtype=np.float32) + 0.5) / fade)[:, None]
    tail = np.zeros((fade, pen.design.n_traces), np.float32)
    total = round(timeline.seconds * lfp.RATE_HZ)
    length = round(timeline.block_s * lfp.RATE_HZ)
    progress.begin(f"recording {pen.name}", len(timeline.running))
    with path.open("wb") as handle:
        for k, running in enumerate(timeline.running):
            start = k * length
            rng = np.random.default_rng([recipe.seed, 92, ord(pen.name[0]), k])
            drift = faults.drift_um * k / max(1, len(timeline.running) - 1)
            block = _block(rng, pen, tissues, length + fade, bool(running), drift)
            block[:fade] *= rise
            block[:fade] += tail
            tail = block[length:] * rise[::-1]
            block = block[: min(length, total - start)]
            _add_events(recipe, block, pen, tissues, drift, start / lfp.RATE_HZ, timeline)
            _spoil(rng, block, recipe, pen, faults, start / lfp.RATE_HZ, timeline)
            np.clip(np.rint(block / UV_PER_BIT), -32768, 32767).astype("<i2").tofile(handle)
            progress.step()


def _rows(pen: TruePenetration, shank: Shank) -> FloatArray:
    tip = pen.design.probe.recorded.tip_distance_um[pen.design.probe.recorded.shank == shank.number]
    return np.arange(tip.min(), tip.max() + lfp.ROW_UM, lfp.ROW_UM)


def _block(
    rng: np.random.Generator,
    pen: TruePenetration,
    tissues: list[Tissue],
    n: int,
    running: bool,
    drift_um: float,
) -> AnyArray:
    """Ongoing activity of all traces, ``(n, traces)`` in uV, before events."""
    block = np.zeros((n, pen.design.n_traces), np.float32)
    for shank, tissue in zip(pen.shanks, tissues, strict=True):
        rows = _rows(pen, shank)
        sources = lfp.row_sources(tissue, shank.law(rows) + drift_um)
        wave = lfp.background(rng, sources, n, running) + lfp.rhythms(rng, sources, n, running)
        _above(rng, wave, sources.outside)
        traces, row = _wiring(pen, shank)
        block[:, traces] = wave[row].T
    return block


def _wiring(pen: TruePenetration, shank: Shank) -> tuple[AnyArray, AnyArray]:
    """Traces of a shank's recorded contacts and the row that each hears."""
    probe = pen.design.probe.recorded
    mine = np.flatnonzero(probe.shank == shank.number)
    row = np.rint((probe.tip_distance_um[mine] - _rows(pen, shank)[0]) / lfp.ROW_UM).astype(int)
    return probe.channel[mine], row


def _add_events(
    recipe: Recipe,
    block: AnyArray,
    pen: TruePenetration,
    tissues: list[Tissue],
    drift_um: float,
    start_s: float,
    timeline: lfp.Timeline,
) -> None:
    """Add ripples and evoked potentials, the same draws for every block and shank, so that none breaks at a seam."""
    for shank, tissue in zip(pen.shanks, tissues, strict=True):
        rows = _rows(pen, shank)
        wave = np.zeros((len(rows), len(block)), np.float32)
        rng = np.random.default_rng([recipe.seed, 93, ord(pen.name[0])])
        lfp.add_events(rng, wave, lfp.row_sources(tissue, shank.law(rows) + drift_um), start_s, timeline)
        traces, row = _wiring(pen, shank)
        block[:, traces] += wave[row].T


def _above(rng: np.random.Generator, wave: AnyArray, outside: AnyArray) -> None:
    """Sites above the brain hear the brain's top through the fluid, fading, and a hum in common."""
    out, inside = np.flatnonzero(outside), np.flatnonzero(~outside)
    if out.size and inside.size:
        far = (out - inside.max()) * lfp.ROW_UM
        hum = 18.0 * np.convolve(rng.standard_normal(wave.shape[1] + 24), np.ones(25) / 5, mode="valid")
        wave[out] += 0.5 * np.exp(-far / 350.0)[:, None] * wave[inside.max()] + hum


def _spoil(
    rng: np.random.Generator,
    block: AnyArray,
    recipe: Recipe,
    pen: TruePenetration,
    faults: Faults,
    start_s: float,
    timeline: lfp.Timeline,
) -> None:
    """Noise of reference, mains and electrodes; artefacts; the clock trace."""
    n = len(block)
    t = start_s + np.arange(n) / lfp.RATE_HZ
    block += np.float32(6.0) * np.sin(2 * np.pi * 50.0 * t)[:, None].astype(np.float32)
    block += (3.0 * rng.standard_normal(n))[:, None].astype(np.float32)
    block *= faults.scale.astype(np.float32)
    block += rng.standard_normal(block.shape, np.float32) * faults.noise_uv.astype(np.float32)
    if recipe.rough:
        for _ in range(rng.poisson(3 * recipe.rough)):
            at, wide = rng.integers(0, n), rng.integers(20, 400)
            kick = rng.standard_t(2) * 400.0 * rng.lognormal(0, 0.3, block.shape[1])
            block[at : at + wide] += np.exp(-np.arange(len(block[at : at + wide])) / 60)[:, None] * kick
    if _has_artefact(recipe, pen):
        hit = (t >= _ARTEFACT_S[0]) & (t < _ARTEFACT_S[1])
        block[hit] += (3000.0 * np.sign(np.sin(2 * np.pi * 20.0 * t[hit])))[:, None].astype(np.float32)
    if pen.design.extra_traces:
        block[:, -pen.design.extra_traces :] = 2000.0 * (np.floor(t) % 2)[:, None]


def channel_rows(recipe: Recipe, pen: TruePenetration) -> Iterable[Sequence[object]]:
    """Rows of ``truth/channels.csv``: the true place of every recorded contact."""
    tree, probe = structures(), pen.design.probe.recorded
    shift = border_shift(recipe)
    for shank in pen.shanks:
        mine = np.flatnonzero(probe.shank == shank.number)
        depth = shank.law(probe.tip_distance_um[mine])
        atlas, codes = shank.at(depth), own_codes(shank, depth, shift)
        for k, contact in enumerate(mine):
            kind, number = kinds()[codes[k]], int(ids()[codes[k]])
            numbers = [f"{x:.2f}" for x in (probe.tip_distance_um[contact], depth[k], *atlas[k])]
            yield (
                pen.name,
                shank.number,
                int(probe.channel[contact]),
                probe.contact_id[contact],
                *numbers,
                number,
                kind.acronym,
                tree.coarse(number).acronym,
                kind.layer,
                str(bool(codes[k])).lower(),
            )

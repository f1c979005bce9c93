"""Field potentials of the invented brain: coloured noise with the tissue's powers, rhythms, ripples, evoked sinks."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.arrays import AnyArray, FloatArray
from leadline.demo.tissue import CONDUCTION_UM, STEP_UM, Tissue

if TYPE_CHECKING:
    from leadline.demo.recipe import Recipe

RATE_HZ = 2500.0
ROW_UM = 20.0
_CENTRES_HZ = np.array([2.0, 7.0, 55.0, 175.0, 550.0])
# Correlation along the shank of the sources behind each part of the spectrum, um.
_REACH = ((0.0, 15.0, 220.0), (15.0, 120.0, 110.0), (120.0, 300.0, 60.0), (300.0, 1100.0, 25.0))
_UNIT_DB = 3.0
_DISC_UM = 500.0
_GREY_S_PER_M = 0.3


@dataclass(frozen=True, slots=True, eq=False)
class Timeline:
    """What happens when, for all probes alike: flashes, ripples, and stretches of running and of rest."""

    seconds: float
    flash_s: FloatArray
    ripple_s: FloatArray
    block_s: float
    running: AnyArray


def make_timeline(recipe: Recipe) -> Timeline:
    """Flashes about every second, ripples in rest, blocks of 8 s."""
    rng = np.random.default_rng([recipe.seed, 90])
    block = min(8.0, recipe.seconds)
    n = max(1, int(np.ceil(recipe.seconds / block)))
    running = rng.random(n) < 0.5
    running[:2] = [False, True][: len(running[:2])]
    flash = np.cumsum(rng.uniform(0.7, 1.1, int(recipe.seconds / 0.7)))
    ripple = np.cumsum(rng.exponential(1.2, int(recipe.seconds * 2)) + 0.25)
    at = np.minimum((ripple / block).astype(int), n - 1)
    ripple = ripple[(ripple < recipe.seconds - 0.3) & ~running[at]]
    return Timeline(recipe.seconds, flash[flash < recipe.seconds - 0.5], ripple, block, running)


@dataclass(frozen=True, slots=True, eq=False)
class Sources:
    """A shank's rows: features ``(R, 5)`` of the five bands and the depth profiles ``(R,)`` of what is coherent."""

    bands: FloatArray
    theta: AnyArray
    slow: FloatArray
    ripple: FloatArray
    sharp: FloatArray
    evoked: FloatArray
    outside: AnyArray


def _blurred(values: AnyArray, um: float) -> FloatArray:
    from scipy.ndimage import gaussian_filter1d

    return np.asarray(gaussian_filter1d(values, um / STEP_UM, axis=0, mode="nearest"))


def row_sources(tissue: Tissue, row_depth_um: FloatArray) -> Sources:
    """Bring a tissue to rows at true depths ``(R,)``, blurred by volume conduction."""

    def at(profile: AnyArray) -> AnyArray:
        return np.interp(row_depth_um, tissue.depth_um, profile)

    amplitude = np.exp(np.log(10) / 20 * _UNIT_DB * tissue.features[:, :5])
    bands = 20 / np.log(10) * np.log(_blurred(amplitude, CONDUCTION_UM)) / _UNIT_DB
    # Theta turns over from the pyramidal layer to the molecular layers (Buzsaki 2002, Neuron 33, 325).
    upper = 0.6 * tissue.named("so") + 0.5 * tissue.named("sp") + 0.3 * tissue.named("sr")
    lower = (
        0.2 * tissue.named("sr") + 1.2 * tissue.named("slm") + 1.0 * tissue.named("mo") + 0.4 * tissue.named("sg", "po")
    )
    away = 0.12 * (tissue.codes > 0)
    theta = _blurred(upper, 70.0) * np.exp(0.3j) - _blurred(lower, 70.0) + _blurred(away, 200.0) * np.exp(0.8j)
    # The slow wave turns over in upper cortex (Steriade et al. 1993, J. Neurosci. 13, 3252).
    slow = 0.5 * tissue.named("L1") + 0.2 * tissue.named("L2") - 0.5 * tissue.named("L4") - tissue.named("L5", "L6")
    ripple = tissue.named("sp") + 0.35 * tissue.named("so") + 0.15 * tissue.named("sr")
    sharp = 0.4 * tissue.named("so") + 0.3 * tissue.named("sp") - tissue.named("sr")
    return Sources(
        np.column_stack([at(bands[:, k]) for k in range(5)]),
        at(theta.real) + 1j * at(theta.imag),
        at(_blurred(slow, 90.0)),
        at(_blurred(ripple, 35.0)),
        at(_blurred(sharp, 60.0)),
        _evoked(tissue, row_depth_um),
        row_depth_um < 0,
    )


def _evoked(tissue: Tissue, row_depth_um: FloatArray) -> FloatArray:
    """Potential ``(R, T)`` in uV after a flash, 0.4 s: sinks by layer and time, balanced by sources.

    Discs of radius 500 um, every 10 um (Pettersen et al. 2006, J. Neurosci. Methods 154, 116); the order of sinks
    follows Mitzdorf (1985), Physiol. Rev. 65, 37, and the times the common practice of mouse recordings (no source).
    """
    t = np.arange(0.0, 0.4, 1 / RATE_HZ)
    csd = np.zeros((len(tissue.depth_um), len(t)))
    steps = (
        ("L4", 0.052, 0.010, 1.0),
        ("L2", 0.078, 0.016, 0.7),
        ("L5", 0.095, 0.022, 0.6),
        ("L6", 0.125, 0.03, 0.35),
        ("tectum", 0.055, 0.014, 0.8),
    )
    for name, peak, width, size in steps:
        where = tissue.named(name) * tissue.drive
        if where.any():
            csd -= size * where[:, None] * np.exp(-((t - peak) ** 2) / (2 * width**2))
    alive = (tissue.drive > 0) & (tissue.codes > 0)
    if not alive.any():
        return np.zeros((len(row_depth_um), len(t)))
    csd[alive] -= csd[alive].mean(axis=0)
    csd = _blurred(csd, 30.0)
    far = np.abs(row_depth_um[:, None] - tissue.depth_um[None, :]) * 1e-6
    reach = np.sqrt(far**2 + (_DISC_UM * 1e-6) ** 2) - far
    volt_per = STEP_UM * 1e-6 / (2 * _GREY_S_PER_M) * reach
    return np.asarray(volt_per @ (csd * 3e3) * 1e6)


def _gain(bands: FloatArray, hz: AnyArray, running: bool) -> AnyArray:
    """Amplitude ``(R, F)``: a falling spectrum, lifted in each band by the tissue and the state."""
    state = np.array([-0.7, 0.5, 0.4, -0.3, 0.2]) if running else np.array([0.5, -0.3, -0.2, 0.2, 0.0])
    octaves = np.log(np.clip(hz, 0.7, None))
    lift = np.stack([np.interp(octaves, np.log(_CENTRES_HZ), row) for row in bands + state])
    base = (np.clip(hz, 0.7, None) ** -0.85) * (hz < 1100) * (hz > 0.2)
    return np.asarray(np.exp(np.log(10) / 20 * _UNIT_DB * lift) * base, np.float32)


def background(rng: np.random.Generator, sources: Sources, n: int, running: bool) -> AnyArray:
    """Coloured noise ``(R, n)`` in uV, correlated along the shank, the more so the slower."""
    from scipy.fft import irfft, next_fast_len
    from scipy.ndimage import gaussian_filter1d

    size = next_fast_len(n, real=True)
    hz = np.fft.rfftfreq(size, 1 / RATE_HZ)
    rows = len(sources.bands)
    spectrum = np.zeros((rows, len(hz)), np.complex64)
    for low, high, reach in _REACH:
        cols = np.flatnonzero((hz >= low) & (hz < high))
        noise = rng.standard_normal((rows, 2 * len(cols)), np.float32)
        smooth = gaussian_filter1d(noise, reach / ROW_UM, axis=0, mode="reflect", truncate=2.5)
        smooth /= np.maximum(smooth.std(axis=1, keepdims=True), np.float32(1e-9))
        shared = rng.standard_normal(2 * len(cols), np.float32)
        share = np.float32(0.5 if high <= 15 else 0.15)
        mixed = (np.sqrt(1 - share) * smooth + np.sqrt(share) * shared).view(np.complex64)
        spectrum[:, cols] = mixed * _gain(sources.bands, hz[cols], running)
    wave = irfft(spectrum, size, axis=1)[:, :n]
    return np.asarray(wave * np.float32(1900.0 * np.sqrt(size)), np.float32)


def rhythms(rng: np.random.Generator, sources: Sources, n: int, running: bool) -> AnyArray:
    """Theta and the slow wave, ``(R, n)`` in uV."""
    t = np.arange(n) / RATE_HZ
    beat = 2 * np.pi * np.cumsum(7.4 + 0.25 * running + _slow_noise(rng, n, 0.6)) / RATE_HZ
    size = (170.0 if running else 60.0) * (1 + 0.3 * _slow_noise(rng, n, 0.5))
    wave = np.exp(1j * (beat + rng.uniform(0, 2 * np.pi))) * size
    out = np.outer(sources.theta.real, wave.real) - np.outer(sources.theta.imag, wave.imag)
    sway = np.sin(2 * np.pi * 0.9 * t + 2.5 * _slow_noise(rng, n, 0.5)) * (30.0 if running else 110.0)
    return np.asarray(out + np.outer(sources.slow, sway), np.float32)


def _slow_noise(rng: np.random.Generator, n: int, seconds: float) -> FloatArray:
    """Smooth noise of unit size that changes over ``seconds``."""
    knots = rng.standard_normal(int(n / RATE_HZ / seconds) + 4)
    from scipy.interpolate import CubicSpline

    return np.asarray(CubicSpline(np.arange(len(knots)), knots)(np.arange(n) / RATE_HZ / seconds + 1))


def add_events(rng: np.random.Generator, wave: AnyArray, sources: Sources, start_s: float, timeline: Timeline) -> None:
    """Add ripples with their sharp waves and evoked potentials to ``wave`` (R, n), which begins at ``start_s``."""
    t = np.arange(-0.08, 0.08, 1 / RATE_HZ)
    stop_s = start_s + wave.shape[1] / RATE_HZ
    pitch, phase = rng.normal(165, 12, len(timeline.ripple_s)), rng.uniform(0, 2 * np.pi, len(timeline.ripple_s))
    sizes = rng.lognormal(0, 0.35, len(timeline.ripple_s))
    for when, hz, angle, size in zip(timeline.ripple_s, pitch, phase, sizes, strict=True):
        if start_s - 0.1 < when < stop_s + 0.1:
            burst = size * 160.0 * np.exp(-(t**2) / (2 * 0.018**2)) * np.cos(2 * np.pi * hz * t + angle)
            swell = size * 220.0 * np.exp(-(t**2) / (2 * 0.022**2))
            _add(wave, np.outer(sources.ripple, burst) + np.outer(sources.sharp, swell), when + t[0] - start_s)
    jitter, sizes = rng.normal(0, 0.002, len(timeline.flash_s)), rng.lognormal(0, 0.3, len(timeline.flash_s))
    for when, late, size in zip(timeline.flash_s, jitter, sizes, strict=True):
        if start_s - 0.5 < when < stop_s:
            _add(wave, size * sources.evoked, when + late - start_s)


def _add(wave: AnyArray, piece: AnyArray, at_s: float) -> None:
    first = round(at_s * RATE_HZ)
    low, high = max(first, 0), min(first + piece.shape[1], wave.shape[1])
    if low < high:
        wave[:, low:high] += piece[:, low - first : high - first]

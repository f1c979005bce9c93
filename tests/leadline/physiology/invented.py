"""Invented recordings for the tests of physiology: traces in memory, probes, and a layered column with known truth."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from leadline.model.probe import Probe
from leadline.model.recording import Events, Recording, Spikes


@dataclass
class InMemory:
    """Traces held as an array ``(T, N)``; counts the samples that were asked for."""

    samples: Any
    sampling_hz: float
    asked: int = 0
    largest: int = 0

    @property
    def n_samples(self) -> int:
        return len(self.samples)

    @property
    def n_channels(self) -> int:
        return self.samples.shape[1]

    def read_uv(self, start, stop, channels):
        block = self.samples[max(start, 0) : stop][:, channels].astype(np.float32)
        self.asked += len(block)
        self.largest = max(self.largest, len(block))
        return block


def line_probe(n: int = 16, pitch_um: float = 40.0, *, shank: int = 0) -> Probe:
    """One column of contacts, the first nearest the tip."""
    return Probe(
        tuple(str(i) for i in range(n)), np.zeros(n), np.arange(n) * pitch_um, np.full(n, shank), np.arange(n), 100.0
    )


def staggered_probe(rows: int = 24, pitch_um: float = 20.0) -> Probe:
    """Two contacts a row; every other row is set aside, so that there are four columns."""
    y = np.repeat(np.arange(rows) * pitch_um, 2)
    x = np.tile([16.0, 48.0, 0.0, 32.0], rows)[: 2 * rows]
    n = 2 * rows
    return Probe(tuple(str(i) for i in range(n)), x, y, np.zeros(n, int), np.arange(n))


def band_noise(rng, n, sampling_hz, band_hz, count):
    """Unit-variance noise ``(count, n)`` in a band."""
    frequency = np.fft.rfftfreq(n, 1 / sampling_hz)
    inside = (frequency >= band_hz[0]) & (frequency < band_hz[1])
    spectrum = np.zeros((count, frequency.size), complex)
    spectrum[:, inside] = rng.normal(size=(count, inside.sum())) + 1j * rng.normal(size=(count, inside.sum()))
    signal = np.fft.irfft(spectrum, n, axis=1)
    return signal / signal.std(axis=1, keepdims=True)


@dataclass(frozen=True)
class Layer:
    """A stretch of the invented column, from the tip upward."""

    name: str
    height_um: float
    theta_uv: float = 50.0
    gamma_uv: float = 15.0
    ripple_uv: float = 5.0
    noise_uv: float = 6.0
    sink: float = 0.0
    units_per_100um: float = 2.0
    rate_hz: float = 4.0


COLUMN = (
    Layer("hilus", 400, theta_uv=60, gamma_uv=30),
    Layer("fissure", 160, theta_uv=160, ripple_uv=4, units_per_100um=0.3),
    Layer("radiatum", 240, theta_uv=70, units_per_100um=0.3),
    Layer("pyramidal", 80, theta_uv=40, ripple_uv=25, noise_uv=12, units_per_100um=10),
    Layer("white", 200, theta_uv=25, gamma_uv=3, ripple_uv=1.5, noise_uv=4, units_per_100um=0),
    Layer("deep", 360, noise_uv=8, units_per_100um=4),
    Layer("middle", 160, sink=-1, gamma_uv=25, units_per_100um=6),
    Layer("upper", 320, sink=0.5, units_per_100um=2, rate_hz=1.5),
)


@dataclass(frozen=True)
class Column:
    """A recording of :data:`COLUMN` with the layer of each row."""

    probe: Probe
    recording: Recording
    layer_of_row: tuple[str, ...]
    row_tip_um: Any


def column(
    seed: int = 0,
    *,
    seconds: float = 30.0,
    sampling_hz: float = 2500.0,
    per_row: int = 2,
    pitch_um: float = 40.0,
    mains_uv: float = 20.0,
    events: int = 40,
) -> Column:
    """Record the invented column: common and private signals in three bands, a sink in the middle layer, units."""
    rng = np.random.default_rng(seed)
    top_um = np.cumsum([layer.height_um for layer in COLUMN])
    tip_um = np.arange(pitch_um / 2, top_um[-1], pitch_um)
    which = np.searchsorted(top_um, tip_um, side="right")
    rows, n = len(tip_um), int(seconds * sampling_hz)

    def mixed(band_hz, names, share):
        size = np.array([getattr(COLUMN[k], names) for k in which])[:, None]
        common = band_noise(rng, n, sampling_hz, band_hz, 1)
        private = band_noise(rng, n, sampling_hz, band_hz, rows)
        smooth = np.exp(-0.5 * ((tip_um[:, None] - tip_um) / 50) ** 2)
        private = smooth @ private / np.sqrt((smooth**2).sum(axis=1, keepdims=True))
        return size * (np.sqrt(share) * common + np.sqrt(1 - share) * private)

    fields = mixed((4, 12), "theta_uv", 0.8) + mixed((0.5, 4), "theta_uv", 0.9)
    if sampling_hz > 200:
        fields += mixed((30, 90), "gamma_uv", 0.3)
    if sampling_hz > 500:
        fields += mixed((140, 220), "ripple_uv", 0.1)
    time_s = np.arange(n) / sampling_hz
    fields += mains_uv * np.sin(2 * np.pi * 50 * time_s)
    event_s = np.linspace(1.0, seconds - 1.0, events) if events else np.zeros(0)
    fields += _response(tip_um, which, time_s, event_s)
    samples = np.repeat(fields, per_row, axis=0).T
    noise = np.repeat([COLUMN[k].noise_uv for k in which], per_row)
    samples = (samples + rng.normal(size=samples.shape) * noise).astype(np.float32)
    contacts = rows * per_row
    probe = Probe(
        tuple(str(i) for i in range(contacts)),
        np.tile(np.arange(per_row) * 32.0, rows),
        np.repeat(tip_um, per_row),
        np.zeros(contacts, int),
        np.arange(contacts),
    )
    recording = Recording(
        InMemory(samples, sampling_hz), _units(rng, top_um, seconds), Events(event_s, ("flash",) * len(event_s))
    )
    return Column(probe, recording, tuple(COLUMN[k].name for k in which), tip_um)


def _response(tip_um, which, time_s, event_s):
    """Potential whose curvature is the layers' sinks and sources, 60 ms after each event."""
    source = np.array([COLUMN[k].sink for k in which])
    source = source - source[source != 0].mean() * (source != 0)
    potential = -np.linalg.pinv(_curvature(tip_um)) @ source
    out = np.zeros((len(tip_um), len(time_s)))
    for at in event_s:
        shape = np.exp(-0.5 * ((time_s - at - 0.06) / 0.012) ** 2)
        near = shape > 1e-6
        out[:, near] += np.outer(300 * potential / np.abs(potential).max(), shape[near])
    return out


def _curvature(tip_um):
    n = len(tip_um)
    matrix = np.diag(np.full(n, -2.0)) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
    return matrix / (tip_um[1] - tip_um[0]) ** 2


def _units(rng, top_um, seconds):
    time_s, unit, tip = [], [], []
    for layer, top in zip(COLUMN, top_um, strict=True):
        for _ in range(rng.poisson(layer.units_per_100um * layer.height_um / 100)):
            here = top - rng.uniform(0, layer.height_um)
            times = rng.uniform(0, seconds, rng.poisson(layer.rate_hz * seconds))
            time_s.append(times)
            unit.append(np.full(times.size, len(unit)))
            tip.append(here + rng.normal(0, 5, times.size))
    time_s, names = np.concatenate(time_s), tuple(str(i) for i in range(len(unit)))
    return Spikes(
        np.sort(time_s),
        np.concatenate(unit)[np.argsort(time_s)],
        np.concatenate(tip)[np.argsort(time_s)],
        np.zeros(time_s.size, int),
        names,
        np.full(time_s.size, -80.0),
        np.full(time_s.size, 4e-4),
    )


def by_layer(values, made: Column):
    """Median of a feature in each layer."""
    names = np.array(made.layer_of_row)
    kept = {layer.name: values[(names == layer.name) & np.isfinite(values)] for layer in COLUMN}
    return {name: float(np.median(some)) for name, some in kept.items() if some.size}

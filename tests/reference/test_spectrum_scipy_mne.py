"""Power spectra against scipy.signal.welch, mne and closed forms."""

import numpy as np
import pytest
import scipy.signal
from tests.leadline.physiology.invented import InMemory

from leadline.model.settings import ProfileSettings
from leadline.physiology.chunks import Thinned, plan
from leadline.physiology.spectrum import band_power_db, field_statistics

NOTHING = np.zeros((0, 2))
NO_MAINS = ProfileSettings(mains_hz=0.0)


def spectrum_of(samples, sampling_hz, settings=NO_MAINS):
    traces = InMemory(samples, sampling_hz)
    chosen = plan(traces, NOTHING)
    return chosen, field_statistics(traces, np.arange(traces.n_channels), chosen, settings)


def brownian(seed, n, channels):
    """Noise whose power falls as 1/f^2 to a floor 60 dB lower, on an offset, as fields do; some 150 uV."""
    rng = np.random.default_rng(seed)
    return np.cumsum(rng.normal(size=(n, channels)), axis=0) * 0.8 + rng.normal(size=(n, channels)) * 5 + 100.0


@pytest.mark.parametrize(("sampling_hz", "seconds"), [(2500.0, 30.0), (1250.0, 12.3), (500.0, 9.0), (1000.0, 1.5)])
def test_density_is_that_of_scipy_welch(sampling_hz, seconds):
    samples = brownian(1, int(seconds * sampling_hz), 70)
    chosen, found = spectrum_of(samples, sampling_hz)
    last = chosen.start[-1] + (chosen.count[-1] + 1) * chosen.hop
    frequency, expected = scipy.signal.welch(
        samples[:last].astype(np.float32).astype(float), sampling_hz, nperseg=chosen.segment, axis=0
    )
    np.testing.assert_allclose(found.frequency_hz, frequency)
    np.testing.assert_allclose(found.power_uv2_per_hz[:, 1:], expected.T[:, 1:], rtol=1e-4)


def test_density_is_that_of_mne():
    mne = pytest.importorskip("mne")
    samples = brownian(2, 25000, 6)
    chosen, found = spectrum_of(samples, 2500.0)
    last = chosen.start[-1] + (chosen.count[-1] + 1) * chosen.hop
    density, frequency = mne.time_frequency.psd_array_welch(
        samples[:last].T.astype(np.float32).astype(float),
        2500.0,
        n_fft=chosen.segment,
        n_overlap=chosen.hop,
        n_per_seg=chosen.segment,
        window="hann",
        verbose="error",
    )
    np.testing.assert_allclose(found.frequency_hz, frequency)
    np.testing.assert_allclose(found.power_uv2_per_hz[:, 2:-1], density[:, 2:-1], rtol=1e-4)


def test_white_noise_has_the_level_of_its_closed_form():
    """One-sided density of white noise of variance s^2 is 2 s^2 / rate: 0.008 for s = 2 at 1000 Hz (Parseval)."""
    noise = np.random.default_rng(3).normal(0, 2.0, (300_000, 4))
    _, found = spectrum_of(noise, 1000.0)
    inside = (found.frequency_hz > 5) & (found.frequency_hz < 495)
    assert found.power_uv2_per_hz[:, inside].mean() == pytest.approx(0.008, rel=0.005)
    assert found.power_uv2_per_hz[:, -1].mean() == pytest.approx(0.004, rel=0.2)


def test_a_sine_has_half_its_squared_amplitude():
    """The power of A sin is A^2 / 2, all of it inside its band; 3 uV at 8 Hz give 4.5 uV^2."""
    time_s = np.arange(60_000) / 1000.0
    samples = 3.0 * np.sin(2 * np.pi * 8.0 * time_s)[:, None] + np.random.default_rng(4).normal(0, 1e-3, (60_000, 2))
    _, found = spectrum_of(samples, 1000.0)
    # the band is 8 Hz wide, its bins are 7.8 Hz
    assert band_power_db(found, (4.0, 12.0))[0] == pytest.approx(10 * np.log10(4.5), abs=0.15)
    assert np.real(found.cross_uv2["theta"][0, 1]) == pytest.approx(4.5, rel=0.02)


def test_a_quarter_turn_is_a_quarter_turn():
    """The phase of a cross-spectrum is the angle by which one sine leads the other, as in scipy.signal.csd."""
    time_s = np.arange(40_000) / 1000.0
    rng = np.random.default_rng(5)
    pair = np.stack([np.sin(2 * np.pi * 8 * time_s + np.pi / 2), np.sin(2 * np.pi * 8 * time_s)], axis=1)
    _, found = spectrum_of(pair * 10 + rng.normal(0, 0.1, pair.shape), 1000.0)
    assert np.angle(found.cross_uv2["theta"][0, 1]) == pytest.approx(np.pi / 2, abs=0.01)
    frequency, cross = scipy.signal.csd(pair[:, 1], pair[:, 0], 1000.0, nperseg=1000)
    assert np.angle(cross[np.argmin(np.abs(frequency - 8))]) == pytest.approx(np.pi / 2, abs=0.01)


def test_thinning_is_filtering_and_keeping_every_nth_sample():
    """Against scipy.signal.upfirdn with the same taps, and against the sine that ought to come out."""
    rng = np.random.default_rng(6)
    samples = rng.normal(size=(30_000, 3)).astype(np.float32)
    thinned = Thinned(InMemory(samples, 30_000.0), 12)
    found = thinned.read_uv(0, thinned.n_samples, np.arange(3))
    half = len(thinned.taps) // 2
    padded = np.pad(samples, ((half, half), (0, 0)), mode="edge")
    expected = scipy.signal.upfirdn(thinned.taps, padded, 1, 12, axis=0)[2 * half // 12 :][: len(found)]
    np.testing.assert_allclose(found, expected, atol=2e-5)
    parts = np.concatenate([thinned.read_uv(a, a + 250, np.arange(3)) for a in range(0, 2500, 250)])
    np.testing.assert_allclose(parts, found, atol=1e-5)


@pytest.mark.parametrize(("frequency_hz", "gain_db", "within_db"), [(10, 0, 0.01), (900, 0, 0.1), (1600, -60, 6.0)])
def test_thinning_passes_fields_and_takes_spikes_away(frequency_hz, gain_db, within_db):
    time_s = np.arange(60_000) / 30_000.0
    samples = np.sin(2 * np.pi * frequency_hz * time_s)[:, None].astype(np.float32)
    out = Thinned(InMemory(samples, 30_000.0), 12).read_uv(500, 4500, np.arange(1))
    gain = 10 * np.log10(np.mean(out.astype(float) ** 2) / 0.5)
    if gain_db == 0:
        assert abs(gain) < within_db
    else:
        assert gain < gain_db + within_db

import numpy as np
import pytest
from tests.leadline.physiology.invented import line_probe, staggered_probe

from leadline.model.probe import Probe
from leadline.physiology.coherence import neighbour_likeness, phase_and_coherence, reference_row, theta_features
from leadline.physiology.rows import rows_of


def cross_of(phases, size, noise):
    """Cross-spectrum of one rhythm at ``phases`` and ``size`` with independent noise of power ``noise``."""
    wave = np.asarray(size) * np.exp(1j * np.asarray(phases))
    return np.outer(wave, wave.conj()) + np.diag(np.full(len(wave), float(noise)))


def test_phases_count_from_the_strongest_row():
    phases, size = np.array([0.3, 0.5, 3.0, -2.5]), np.array([1.0, 3.0, 2.0, 1.0])
    cross = cross_of(phases, size, 0.5)
    reference = reference_row(cross, np.ones(4, bool))
    assert reference == 1
    phase, coherence = phase_and_coherence(cross, reference)
    np.testing.assert_allclose(np.exp(1j * phase), np.exp(1j * (phases - 0.5)))
    np.testing.assert_allclose(coherence, size**2 * 9 / ((size**2 + 0.5) * 9.5) + [0, 1 - 81 / 9.5**2, 0, 0])


def test_rows_without_signals_have_no_phase_and_are_no_reference():
    cross = cross_of([0, 0, 0], [9, 1, 2], 0.1)
    cross[0] = cross[:, 0] = 0
    assert reference_row(cross, np.array([False, True, True])) == 2
    phase, coherence = phase_and_coherence(cross, 2)
    assert np.isnan(phase[0])
    assert np.isnan(coherence[0])
    assert reference_row(cross, np.zeros(3, bool)) == -1


def test_shanks_that_beat_together_share_one_clock_and_others_keep_their_own():
    probe = Probe(tuple("abcd"), np.zeros(4), [0, 40, 0, 40], [0, 0, 1, 1], np.arange(4))
    rows = rows_of(probe)
    phases = np.array([0.2, 0.0, 1.2, 1.0])
    together = cross_of(phases, [1, 2, 1, 3], 0.1)
    phase, _ = theta_features(together, rows, np.ones(4, bool))
    np.testing.assert_allclose(phase, phases - 1.0, atol=1e-9)
    apart = together.copy()
    apart[:2, 2:] = apart[2:, :2] = 0
    phase, _ = theta_features(apart, rows, np.ones(4, bool))
    np.testing.assert_allclose(phase, [0.2, 0, 0.2, 0], atol=1e-9)


def test_neighbours_are_forty_micrometres_apart_and_of_one_column():
    """On the staggered probe that is the second next row, and the first one of the same column."""
    probe = staggered_probe(12)
    rows = rows_of(probe)
    tip = probe.tip_distance_um
    cross = {
        "gamma": 4.0 * np.exp(-np.abs(tip[:, None] - tip) / 100) * np.where(probe.x_um[:, None] == probe.x_um, 1, 0.1)
    }
    correlation, coherence = neighbour_likeness(cross, probe, rows, np.ones(24, bool))
    np.testing.assert_allclose(correlation, np.exp(-0.4), rtol=1e-6)
    np.testing.assert_allclose(coherence, np.exp(-0.8), rtol=1e-6)


def test_gaps_and_bad_contacts_are_not_bridged():
    probe = line_probe(9, 40.0)
    tips = np.where(np.arange(9) > 3, probe.y_um + 400, probe.y_um)
    probe = Probe(probe.contact_id, probe.x_um, tips, probe.shank, probe.channel)
    cross = {"gamma": np.full((9, 9), 0.5) + 0.5 * np.eye(9)}
    good = np.ones(9, bool)
    good[[5, 7]] = False
    correlation, _ = neighbour_likeness(cross, probe, rows_of(probe), good)
    assert np.isnan(correlation).tolist() == [False, False, False, False, True, True, True, True, True]
    assert correlation[:4] == pytest.approx(0.5)


def test_without_cross_spectra_nothing_is_known():
    probe = line_probe(5)
    correlation, coherence = neighbour_likeness({}, probe, rows_of(probe), np.ones(5, bool))
    assert np.isnan(correlation).all()
    assert np.isnan(coherence).all()

"""Site maps that the fields contradict; fields whose likeness falls with the true distance."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.leadline.physiology.invented import InMemory, line_probe

from leadline.model.recording import Recording, Spikes
from leadline.model.settings import ProfileSettings
from leadline.physiology.order import deaf, order_doubts
from leadline.physiology.reading import read
from leadline.physiology.rows import Rows, rows_of

BANKS = np.concatenate([20.0 * np.arange(40), 1400.0 + 20.0 * np.arange(40)])


def fields(true_um, seed=0, reach_um=120.0, common=0.2):
    """A cross-spectrum estimated from 400 segments of fields that fall off with distance, and a common signal."""
    rng = np.random.default_rng(seed)
    distance = np.abs(true_um[:, None] - true_um)
    covariance = (1 - common) * np.exp(-distance / reach_um) + common + 0.03 * np.eye(len(true_um))
    root = np.linalg.cholesky(covariance * np.outer(*[np.linspace(0.5, 3, len(true_um))] * 2))
    wave = root @ (rng.normal(size=(len(true_um), 400)) + 1j * rng.normal(size=(len(true_um), 400)))
    return wave @ wave.conj().T


def said(cross, claimed_um, shank=None, x_um=None, good=None):
    n = len(claimed_um)
    shank = np.zeros(n, int) if shank is None else shank
    order = np.lexsort((claimed_um, shank))
    rows = Rows(shank[order], claimed_um[order], np.argsort(order))
    x = np.zeros(n) if x_um is None else x_um[order]
    return order_doubts(cross[np.ix_(order, order)], rows, x, np.ones(n, bool) if good is None else good)


@settings(max_examples=25)
@given(
    pitch=st.sampled_from([10.0, 20.0, 40.0, 100.0]), n=st.integers(4, 80), reach=st.floats(60.0, 400.0),
    common=st.floats(0.0, 0.8), seed=st.integers(0, 999),
)  # fmt: skip
def test_a_right_map_is_not_doubted(pitch, n, reach, common, seed):
    true = pitch * np.arange(n)
    assert said(fields(true, seed, max(reach, 1.5 * pitch), common), true) == ()


@settings(max_examples=25)
@given(seed=st.integers(0, 999))
def test_a_lost_order_is_said(seed):
    true = 20.0 * np.arange(60)
    lost = np.random.default_rng(seed).permutation(true)
    (sentence,) = said(fields(true, seed), lost)
    assert "no more alike" in sentence
    assert "device_channel_indices" in sentence


def test_a_gap_that_the_map_does_not_know_is_said_with_its_place():
    (sentence,) = said(fields(BANKS), 20.0 * np.arange(80))
    assert "between tip distances 780 and 800 um" in sentence


def test_a_gap_that_is_none_is_said_with_its_width():
    (sentence,) = said(fields(20.0 * np.arange(80)), BANKS)
    assert "620 um between them" in sentence or "640 um between them" in sentence or "660 um between them" in sentence


def test_banks_and_gaps_told_rightly_are_not_doubted():
    assert said(fields(BANKS), BANKS) == ()


def test_one_shank_cut_into_two_is_said():
    true = 20.0 * np.arange(60)
    shank = np.repeat([0, 1], 30)
    (sentence,) = said(fields(true), np.tile(true[:30], 2), shank, 250.0 * shank)
    assert "on shank 0" in sentence
    assert "on shank 1" in sentence


def test_bad_rows_break_nothing():
    true = 20.0 * np.arange(60)
    cross = fields(true)
    for row in (20, 40, 41):
        cross[row] = cross[:, row] = 0.01 * cross[row]
        cross[row, row] = 5.0
    assert said(cross, true) == ()


def test_fields_that_know_no_distance_are_not_judged():
    true = 20.0 * np.arange(60)
    assert said(fields(true, common=0.99), np.random.default_rng(1).permutation(true)) == ()


def test_one_source_heard_through_uneven_noise_is_not_judged():
    """Where a row hears less of it, likeness drops without any distance."""
    rng = np.random.default_rng(4)
    gain = 20.0 + 60.0 * np.exp(-0.5 * ((np.arange(60) - 20) / 5.0) ** 2)
    wave = gain[:, None] * (rng.normal(size=400) + 1j * rng.normal(size=400))
    wave += 25.0 * (rng.normal(size=(60, 400)) + 1j * rng.normal(size=(60, 400)))
    assert said(wave @ wave.conj().T, 20.0 * np.arange(60)) == ()


def test_noise_in_place_of_fields_is_said():
    rng = np.random.default_rng(2)
    probe = line_probe(24)
    rows = rows_of(probe)
    noise = rng.normal(size=(24, 300)) + 1j * rng.normal(size=(24, 300))
    assert "share next to nothing" in deaf(noise @ noise.conj().T, rows, np.ones(24, bool))[0]
    assert deaf(fields(40.0 * np.arange(24)), rows, np.ones(24, bool)) == ()


@pytest.mark.parametrize(("last_s", "doubted"), [(5.9, False), (3.0, True)])
def test_spikes_that_end_long_before_the_fields_are_said(last_s, doubted):
    rng = np.random.default_rng(3)
    shared = np.cumsum(rng.normal(0, 3, 15000)) * 0.01
    traces = InMemory((shared[:, None] + rng.normal(0, 10, (15000, 16))).astype(np.float32), 2500.0)
    time_s = np.sort(rng.uniform(0, last_s, 800))
    spikes = Spikes(time_s, np.zeros(800, int), np.full(800, 300.0), np.zeros(800, int), ("u",))
    probe = line_probe()
    told = read(Recording(traces, spikes), probe, rows_of(probe), ProfileSettings()).warnings
    assert any("are they of one recording" in w for w in told) == doubted

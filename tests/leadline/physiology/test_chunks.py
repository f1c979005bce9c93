from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.leadline.physiology.invented import InMemory

from leadline.physiology.chunks import MAX_READ_S, Thinned, allowed_spans, fields, halves, plan

NOTHING = np.zeros((0, 2))


class Length(InMemory):
    """Traces of any length that hold nothing."""

    def __init__(self, seconds, sampling_hz=2500.0):
        super().__init__(np.empty((0, 4)), sampling_hz)
        self.length = int(seconds * sampling_hz)

    @property
    def n_samples(self):
        return self.length


@given(
    st.lists(st.tuples(st.floats(0, 100), st.floats(0.01, 20)), max_size=6),
    st.floats(3, 110),
)
def test_no_segment_touches_an_excluded_interval(places, seconds):
    excluded = np.array([(start, start + length) for start, length in places]).reshape(-1, 2)
    chosen = plan(Length(seconds, 500.0), excluded)
    for start, stop, count in chosen.blocks():
        assert 0 <= start < stop <= int(seconds * 500)
        assert stop - start == (count + 1) * chosen.hop
        for begin, end in excluded * 500:
            assert stop <= begin or start >= end


@given(st.lists(st.tuples(st.floats(-5, 100), st.floats(0.01, 20)), max_size=6))
def test_allowed_spans_are_in_order_and_apart(places):
    excluded = np.array([(start, start + length) for start, length in places]).reshape(-1, 2)
    spans = allowed_spans(5000, 50.0, excluded)
    assert (spans[:, 1] > spans[:, 0]).all()
    assert (spans[1:, 0] >= spans[:-1, 1]).all()


def test_whole_recordings_are_read_without_a_seam():
    chosen = plan(Length(100), NOTHING)
    blocks = list(chosen.blocks())
    assert chosen.share == 1.0
    for (_, stop, _), (start, _, _) in pairwise(blocks):
        assert start == stop - chosen.hop
    assert 100 * 2500 - blocks[-1][1] < chosen.hop


@pytest.mark.parametrize("gap", [False, True])
def test_halves_make_the_segments_and_are_read_once(gap):
    samples = np.random.default_rng(1).normal(size=(30_000, 3)).astype(np.float32)
    traces = InMemory(samples, 1000.0)
    chosen = plan(traces, np.array([[12.0, 12.1]]) if gap else NOTHING)
    pairs = list(halves(lambda a, b: traces.read_uv(a, b, np.arange(3)), chosen))
    starts = [start + chosen.hop * k for start, _, count in chosen.blocks() for k in range(count)]
    assert len(pairs) == chosen.n_segments == len(starts)
    for (before, after), start in zip(pairs, starts, strict=True):
        assert np.array_equal(np.hstack([before, after]).T, samples[start : start + chosen.segment])
    assert traces.largest == chosen.hop
    assert traces.asked == chosen.hop * (chosen.n_segments + (2 if gap else 1))


def test_long_recordings_are_sampled_evenly_to_the_end():
    chosen = plan(Length(5 * 3600), NOTHING)
    read_s = chosen.n_segments * chosen.hop / 2500
    assert read_s == pytest.approx(MAX_READ_S, rel=0.1)
    gaps = np.diff(chosen.start) / 2500
    assert gaps.max() < 1.3 * gaps.min()
    assert chosen.start[0] / 2500 < 200
    assert chosen.start[-1] / 2500 > 5 * 3600 - 300


def test_a_fraction_is_a_fraction():
    chosen = plan(Length(600), NOTHING, 0.25)
    assert chosen.n_segments * chosen.hop / 2500 == pytest.approx(150, rel=0.1)


def test_many_short_stretches_are_read_in_shorter_segments():
    """Two seconds never lie free between interruptions a second apart."""
    excluded = np.array([[s, s + 0.1] for s in np.arange(0.0, 30.0, 1.0)])
    chosen = plan(Length(30), excluded)
    assert 0.25 <= chosen.segment / 2500 <= 0.6
    assert chosen.n_segments >= 8


def test_nothing_allowed_is_nothing_planned():
    assert plan(Length(30), np.array([[0.0, 40.0]])).n_segments == 0


@pytest.mark.parametrize(("rate", "factor"), [(30000.0, 12), (25000.0, 10), (20000.0, 8), (5000.0, 2)])
def test_fast_recordings_are_thinned_to_field_rates(rate, factor):
    thinned = fields(Length(10, rate))
    assert thinned.factor == factor
    assert thinned.sampling_hz == rate / factor == pytest.approx(2500.0)
    assert thinned.n_samples == 10 * rate / factor


@pytest.mark.parametrize("rate", [500.0, 1000.0, 2500.0, 4000.0])
def test_slow_recordings_are_taken_as_they_are(rate):
    traces = Length(10, rate)
    assert fields(traces) is traces


def test_thinning_holds_little_at_once_and_reads_only_what_it_needs():
    traces = InMemory(np.zeros((300_000, 2), np.float32), 30_000.0)
    block = Thinned(traces, 12).read_uv(2500, 12_500, np.arange(2))
    assert block.shape == (10_000, 2)
    assert traces.largest <= 15_000 + 400
    assert traces.asked < 1.05 * 120_000

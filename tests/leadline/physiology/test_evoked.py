import numpy as np
import pytest
from tests.leadline.physiology.invented import InMemory, line_probe

from leadline.model.recording import Events
from leadline.physiology.csd import row_csd_operator
from leadline.physiology.evoked import evoked_rows, responses, usable_events
from leadline.physiology.rows import rows_of

NOTHING = np.zeros((0, 2))
WINDOW_S = (-0.1, 0.3)


def answering(seed=0, noise_uv=20.0, kinds=("flash",), answered=("flash",)):
    """Sixteen contacts, a sink at contact 8 fifty milliseconds after the answered kinds and a later one at 4."""
    rng = np.random.default_rng(seed)
    probe = line_probe(16, 100.0)
    n = 60_000
    samples = rng.normal(0, noise_uv, (n, 16))
    times = np.sort(rng.uniform(1, 58, 120))
    kind = tuple(kinds[i % len(kinds)] for i in range(120))
    t = np.arange(n) / 1000.0
    bumps = np.exp(-np.abs(probe.y_um - 800) / 150), np.exp(-np.abs(probe.y_um - 400) / 150)
    for at, name in zip(times, kind, strict=True):
        if name in answered:
            near = slice(int(at * 1000), int(at * 1000) + 300)
            for bump, late, size in zip(bumps, (0.05, 0.12), (100, 60), strict=True):
                samples[near] -= size * np.outer(np.exp(-0.5 * ((t[near] - at - late) / 0.008) ** 2), bump)
    return probe, InMemory(samples, 1000.0), Events(times, kind)


def test_the_first_sink_and_every_latency_are_read_off():
    probe, traces, events = answering()
    (response,) = responses(traces, np.arange(16), events, NOTHING, WINDOW_S)
    rows = rows_of(probe)
    found = evoked_rows(response, rows.averaging(np.ones(16, bool)), row_csd_operator(probe))
    assert (response.kind, response.count) == ("flash", 120)
    assert np.nanargmin(found.csd_ua_per_mm3) == 8
    assert found.sink_latency_s[8] == pytest.approx(0.05, abs=0.004)
    assert found.sink_latency_s[4] == pytest.approx(0.12, abs=0.004)
    assert found.latency_s[8] == pytest.approx(0.05, abs=0.004)
    assert found.clarity > 10


def test_noise_alone_is_not_clear():
    for seed in range(4):
        probe, traces, events = answering(seed, answered=())
        (response,) = responses(traces, np.arange(16), events, NOTHING, WINDOW_S)
        found = evoked_rows(response, rows_of(probe).averaging(np.ones(16, bool)), row_csd_operator(probe))
        assert found.clarity < 5.0
        assert np.isnan(found.sink_latency_s).mean() > 0.8


def test_each_kind_is_averaged_alone_and_all_together():
    _, traces, events = answering(kinds=("flash", "tone", "click"))
    found = responses(traces, np.arange(16), events, NOTHING, WINDOW_S)
    assert [r.kind for r in found] == ["", "flash", "tone", "click"]
    assert [r.count for r in found] == [120, 40, 40, 40]
    peak = [np.abs(r.mean_uv[8]).max() for r in found]
    assert peak[1] > 2 * peak[2]
    assert peak[1] > 2 * peak[0]


def test_rare_kinds_are_counted_together_only():
    _, traces, events = answering()
    kinds = tuple(f"picture {i}" for i in range(120))
    (only,) = responses(traces, np.arange(16), Events(events.time_s, kinds), NOTHING, WINDOW_S)
    assert (only.kind, only.count) == ("", 120)


def test_events_at_the_edges_and_near_excluded_intervals_are_dropped():
    events = Events(np.array([0.05, 0.2, 5.0, 5.45, 9.9]), ("e",) * 5)
    usable = usable_events(events, 10_000, 1000.0, np.array([[5.5, 6.0]]), WINDOW_S)
    assert usable.tolist() == [False, True, True, False, False]


def test_too_few_events_give_no_response():
    _, traces, events = answering()
    few = Events(events.time_s[:9], events.kind[:9])
    assert responses(traces, np.arange(16), few, NOTHING, WINDOW_S) == ()


def test_a_limit_bounds_what_an_artefact_can_do():
    _, traces, events = answering()
    traces.samples[int(events.time_s[7] * 1000) + 50] += 1e5
    (wild,) = responses(traces, np.arange(16), events, NOTHING, WINDOW_S)
    (tame,) = responses(traces, np.arange(16), events, NOTHING, WINDOW_S, limit_uv=np.full(16, 300.0))
    assert np.abs(wild.mean_uv).max() > 100
    assert np.abs(tame.mean_uv[8]).max() == pytest.approx(100, rel=0.2)


def test_no_time_before_the_event_is_no_hindrance():
    _, traces, events = answering()
    (response,) = responses(traces, np.arange(16), events, NOTHING, (0.0, 0.3))
    assert response.time_s[np.abs(response.mean_uv[8]).argmax()] == pytest.approx(0.05, abs=0.004)

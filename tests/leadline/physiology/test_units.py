import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.leadline.physiology.invented import line_probe

from leadline.model.recording import Spikes
from leadline.physiology.rows import rows_of
from leadline.physiology.units import unit_features

NOTHING = np.zeros((0, 2))


def spikes_of(units, seconds=100.0, seed=0, shank=0, **more):
    """Spikes of ``units``, pairs of tip distance and rate, regular in time."""
    rng = np.random.default_rng(seed)
    count = [int(rate * seconds) for _, rate in units]
    time_s = np.concatenate([np.sort(rng.uniform(0, seconds, n)) for n in count]) if units else np.zeros(0)
    unit = np.repeat(np.arange(len(units)), count)
    tip = np.repeat([tip for tip, _ in units], count)
    order = np.argsort(time_s)
    return Spikes(
        time_s[order],
        unit[order],
        tip[order],
        np.full(len(order), shank),
        tuple(str(i) for i in range(len(units))),
        **{name: values[unit][order] for name, values in more.items()},
    )


def test_units_spread_evenly_have_their_density_everywhere_even_at_the_ends():
    rows = rows_of(line_probe(40, 20.0))
    units = [(tip, 1.0) for tip in np.arange(100 - 8, 100 + 39 * 20 + 11, 2.0)]
    found = unit_features(spikes_of(units), rows, 100.0, NOTHING)
    np.testing.assert_allclose(found["unit_density_per_100um"], 50, rtol=0.05)
    np.testing.assert_allclose(found["spike_rate_hz"], 50, rtol=0.05)


def test_a_dense_layer_stands_out_where_it_is():
    rows = rows_of(line_probe(40, 20.0))
    units = [(500 + tip, 5.0) for tip in np.linspace(-20, 20, 9)] + [(800.0, 2.0)]
    found = unit_features(spikes_of(units), rows, 100.0, NOTHING)
    density = found["unit_density_per_100um"]
    assert rows.tip_distance_um[density.argmax()] == 500
    assert density[rows.tip_distance_um < 380].max() == 0.0
    assert density.sum() * 0.2 == pytest.approx(10, rel=0.02)


@given(st.lists(st.tuples(st.floats(100, 860), st.floats(0.5, 5)), max_size=12))
def test_densities_are_never_negative_and_add_up(units):
    rows = rows_of(line_probe(60, 20.0))
    found = unit_features(spikes_of(units), rows, 100.0, NOTHING)
    assert (found["unit_density_per_100um"] >= 0).all()
    inner = [u for u in units if u[0] > 220]
    assert found["unit_density_per_100um"].sum() * 0.2 >= 0.9 * len(inner) - 1e-9


def test_amplitude_and_width_are_those_of_the_units_near_and_missing_elsewhere():
    rows = rows_of(line_probe(40, 20.0))
    found = unit_features(
        spikes_of(
            [(300.0, 20.0), (320.0, 1.0)], amplitude_uv=np.array([-50.0, -150.0]), width_s=np.array([2e-4, 4e-4])
        ),
        rows,
        100.0,
        NOTHING,
    )
    near = np.flatnonzero(rows.tip_distance_um == 300)[0]
    assert 60 < found["spike_amplitude_uv"][near] < 100  # each unit counts once, the nearer one more
    assert 2.2e-4 < found["spike_width_s"][near] < 3.2e-4
    assert np.isnan(found["spike_amplitude_uv"][rows.tip_distance_um > 500]).all()


def test_a_unit_of_few_spikes_is_no_unit_but_its_spikes_count():
    rows = rows_of(line_probe(40, 20.0))
    found = unit_features(spikes_of([(300.0, 0.1)]), rows, 100.0, NOTHING)
    assert found["unit_density_per_100um"].max() == 0
    assert found["spike_rate_hz"].max() > 0


def test_excluded_time_counts_neither_as_spikes_nor_as_time():
    rows = rows_of(line_probe(40, 20.0))
    spikes = spikes_of([(300.0, 20.0)])
    whole = unit_features(spikes, rows, 100.0, NOTHING)["spike_rate_hz"]
    part = unit_features(spikes, rows, 100.0, np.array([[-5.0, 30.0], [20.0, 50.0]]))["spike_rate_hz"]
    np.testing.assert_allclose(part, whole, rtol=0.1)


def test_the_response_is_the_change_of_rate_after_events():
    rows = rows_of(line_probe(40, 20.0))
    event_s = np.arange(1.0, 99.0, 1.0)
    base = spikes_of([(300.0, 10.0)])
    extra = (event_s[:, None] + np.linspace(0.02, 0.19, 4)).ravel()
    time_s = np.sort(np.concatenate([base.time_s, extra]))
    n = len(time_s)
    spikes = Spikes(time_s, np.zeros(n, int), np.full(n, 300.0), np.zeros(n, int), ("0",))
    found = unit_features(spikes, rows, 100.0, NOTHING, event_s)
    kernel = 100 / (25 * np.sqrt(2 * np.pi))
    assert found["evoked_rate_hz"].max() == pytest.approx(4 / 0.19 * kernel, rel=0.15)
    assert "evoked_rate_hz" not in unit_features(spikes, rows, 100.0, NOTHING, event_s[:9])


def test_no_spikes_is_silence():
    rows = rows_of(line_probe(10))
    found = unit_features(spikes_of([]), rows, 10.0, NOTHING)
    assert found["spike_rate_hz"].tolist() == [0.0] * 10


def test_units_of_another_shank_do_not_count():
    rows = rows_of(line_probe(10))
    assert unit_features(spikes_of([(200.0, 5.0)], shank=1), rows, 100.0, NOTHING)["spike_rate_hz"].max() == 0

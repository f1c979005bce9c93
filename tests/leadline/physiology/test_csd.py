import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tests.leadline.physiology.invented import line_probe, staggered_probe

from leadline.model.probe import Probe
from leadline.physiology.csd import csd_operator, row_csd_operator
from leadline.physiology.rows import rows_of


def test_columns_of_other_gain_or_depth_do_not_leak_into_the_density():
    """A staggered probe whose every other column reads 30 uV more: along the list of contacts that is a zigzag."""
    probe = staggered_probe()
    offset = np.where(probe.x_um < 20, 30.0, 0.0)
    assert np.nanmax(np.abs(csd_operator(probe) @ offset)) < 1e-9


@given(st.floats(-3, 3), st.floats(-3, 3), st.floats(-1, 1), st.sets(st.integers(0, 15), max_size=6))
def test_a_parabola_has_its_curvature_wherever_contacts_are_missing(level, slope, curve, missing):
    probe = line_probe(16, 25.0)
    good = ~np.isin(np.arange(16), list(missing))
    z = probe.tip_distance_um / 100.0
    potential = level + slope * z + curve * z**2
    potential[~good] = 1e6
    operator = csd_operator(probe, good)
    found = np.nan_to_num(operator) @ potential
    known = np.isfinite(operator).all(axis=1)
    np.testing.assert_allclose(found[known], -0.3 * 2 * curve * 1e-4 * 1e3, atol=1e-6)


def test_ends_and_gaps_say_nothing():
    tips = np.array([0, 100, 200, 300, 1000, 1100, 1200, 1300.0])
    probe = Probe(tuple("abcdefgh"), np.zeros(8), tips, np.zeros(8, int), np.arange(8))
    known = np.isfinite(csd_operator(probe)).all(axis=1)
    assert known.tolist() == [False, True, True, False, False, True, True, False]


def test_shanks_do_not_mix():
    one, two = line_probe(8), line_probe(8, shank=1)
    both = Probe(
        tuple(str(i) for i in range(16)),
        np.zeros(16),
        np.concatenate([one.y_um, two.y_um + 20]),
        np.repeat([0, 1], 8),
        np.arange(16),
    )
    operator = np.nan_to_num(csd_operator(both))
    assert not operator[:8, 8:].any()
    assert not operator[8:, :8].any()


def test_contacts_that_never_share_a_column_are_taken_as_one():
    probe = Probe(tuple("abcde"), [0, 9, 3, 12, 6], np.arange(5) * 50.0, np.zeros(5, int), np.arange(5))
    found = csd_operator(probe) @ (probe.tip_distance_um / 100.0) ** 2
    assert found[1:-1] == pytest.approx(-0.06)


def test_rows_are_smoothed_without_losing_a_sink_or_its_place():
    probe = staggered_probe(60)
    rows = rows_of(probe)
    z = probe.tip_distance_um
    potential = -100 * np.exp(-0.5 * ((z - 600) / 100) ** 2)
    found = row_csd_operator(probe) @ potential
    assert rows.tip_distance_um[np.nanargmin(found)] == 600
    assert np.nanmin(found) == pytest.approx(-0.3 * 100 / 100**2 * 1e3, rel=0.3)
    assert np.isnan(found[[0, 1, -2, -1]]).all()

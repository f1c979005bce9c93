import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from tests.leadline.physiology.invented import staggered_probe

from leadline.model.probe import Probe
from leadline.physiology.rows import rows_of, same_column


def probe_of(tips, shanks):
    n = len(tips)
    return Probe(tuple(str(i) for i in range(n)), np.zeros(n), tips, shanks, np.arange(n))


def test_staggered_columns_share_rows_and_keep_their_columns():
    probe = staggered_probe(4)
    rows = rows_of(probe)
    assert rows.tip_distance_um.tolist() == [0.0, 20.0, 40.0, 60.0]
    assert rows.row_of_contact.tolist() == [0, 0, 1, 1, 2, 2, 3, 3]
    assert same_column(probe).sum(axis=1).tolist() == [2] * 8
    assert rows.pitch_um(0) == 20.0


@given(st.lists(st.tuples(st.integers(0, 40), st.integers(0, 2)), min_size=1, max_size=30), st.randoms())
def test_rows_do_not_depend_on_the_order_of_contacts(places, random):
    places = [(20.0 * y, shank) for y, shank in places]
    rows = rows_of(probe_of(*map(np.array, zip(*places, strict=True))))
    assert list(zip(rows.shank.tolist(), rows.tip_distance_um.tolist(), strict=True)) == sorted(
        {(shank, y) for y, shank in places}
    )
    for contact, (y, shank) in enumerate(places):
        row = rows.row_of_contact[contact]
        assert (rows.tip_distance_um[row], rows.shank[row]) == (y, shank)
    shuffled = places.copy()
    random.shuffle(shuffled)
    again = rows_of(probe_of(*map(np.array, zip(*shuffled, strict=True))))
    assert np.array_equal(rows.tip_distance_um, again.tip_distance_um)


def test_means_leave_out_what_is_bad_or_missing():
    rows = rows_of(staggered_probe(2))
    values = np.array([1.0, 3.0, np.nan, 5.0])
    assert rows.mean(values).tolist() == [2.0, 5.0]
    good = np.array([False, True, True, False])
    assert rows.mean(values, good)[0] == 3.0
    assert np.isnan(rows.mean(values, good)[1])
    assert rows.averaging(np.array([True, True, False, False]))[0].tolist() == [0.5, 0.5, 0, 0]
    assert np.isnan(rows.averaging(np.array([True, True, False, False]))[1]).all()
    assert rows.mean(np.ones((4, 3))).shape == (2, 3)

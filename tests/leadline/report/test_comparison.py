"""The picture of a comparison."""

import numpy as np

from leadline.report.comparison import _banks, _edges


def test_nothing_is_painted_between_banks_of_sites():
    low, high = _banks(np.concatenate([np.arange(0.0, 400.0, 20.0), np.arange(900.0, 1200.0, 20.0)]))
    assert (low[-1], high[0]) == (380.0, 900.0)
    assert _edges(low)[-1] == 390.0
    assert [len(b) for b in _banks(np.array([100.0]))] == [1]

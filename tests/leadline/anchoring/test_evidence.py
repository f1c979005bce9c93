"""Evidence is checked at birth."""

from dataclasses import replace

import numpy as np
import pytest

from leadline.anchoring.evidence import ShankEvidence
from leadline.base.errors import LeadlineError

DEPTH = np.arange(0.0, 100.0, 5.0)
GOOD = ShankEvidence("A", 0, np.array([10.0, 20.0]), None, DEPTH, np.where(DEPTH < 40, 3, 4), 90.0)


def test_labels_are_those_of_the_nearest_depth_and_of_lateral_copies():
    assert GOOD.label_at(np.array([-50.0, 37.0, 38.0, 500.0])).tolist() == [3, 3, 4, 4]
    moved = replace(GOOD, lateral_label_id=np.stack([GOOD.label_id, np.full(DEPTH.size, 7)]))
    assert moved.label_at(np.array([[0.0, 90.0], [0.0, 90.0]]), np.array([[0], [1]])).tolist() == [[3, 4], [7, 7]]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"tip_distance_um": np.array([20.0, 10.0])}, "tip distances must ascend"),
        ({"tip_distance_um": np.array([10.0, 10.0])}, "tip distances must ascend"),
        ({"tip_distance_um": np.zeros(0)}, "tip distances must ascend"),
        ({"tip_distance_um": np.array([10.0, np.nan])}, "not finite"),
        ({"depth_um": DEPTH[::-1]}, "track depths must ascend"),
        ({"label_id": np.zeros(3)}, "do not fit"),
        ({"lateral_label_id": np.zeros((2, 3))}, "do not fit"),
    ],
)
def test_what_does_not_fit_is_refused(change, message):
    with pytest.raises(LeadlineError, match=message):
        replace(GOOD, **change)

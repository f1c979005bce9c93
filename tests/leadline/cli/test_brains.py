"""What a run says at its end."""

from leadline.cli.brains import _told

ROW = {
    "penetration": "A",
    "channels": 4,
    "in_brain": 3,
    "depth_sd_um": 21.0,
    "p_region": 0.9,
    "regions": ["CTX", "HPF"],
}


def test_a_penetration_is_told_in_a_line():
    assert _told(ROW) == "A: 3 of 4 channels in the brain, depth sd 21.0 um, p_region 0.9; CTX > HPF"


def test_one_without_a_track_is_told_as_that():
    lost = {**ROW, "in_brain": 0, "depth_sd_um": None, "p_region": None, "regions": []}
    assert _told(lost) == "A: none of its 4 channels is located; the warnings say why"

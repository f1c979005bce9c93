"""The section of a shank."""

import re

import numpy as np
import pandas as pd
import pytest
from tests.finished_brain import TIP_DISTANCE_UM, track, write_finished_brain

from leadline.pipeline.bench import Bench
from leadline.report.figures import draw_section, scale_of, write_sections
from leadline.report.findings import gather
from leadline.report.lanes import local_stretch, shares, with_gaps


@pytest.fixture(scope="module")
def findings(tmp_path_factory):
    return gather(Bench(write_finished_brain(tmp_path_factory.mktemp("figures"))))


def test_contacts_stand_level_with_their_places_where_the_map_is_one_to_one(findings):
    shank = findings.shank("A", 0)
    scale = scale_of(shank)
    assert np.allclose(scale.of_tip(TIP_DISTANCE_UM), shank.channels["track_depth_um"], atol=0.01)
    assert scale.top_um < 0 < track().length_um < scale.bottom_um


def test_a_section_has_every_lane_that_was_measured(findings):
    figure = draw_section(findings, findings.shank("A", 0))
    titles = [axis.get_title().replace("\n", " ") for axis in figure.axes]
    assert titles[:3] == ["tissue", "atlas", "ties"]
    assert titles[3:5] == ["LFP power", "current sinks (red)"]
    assert titles[5:9] == ["ripple-band power", "unit density", "spike amplitude", "delta power"]
    assert titles[9] == "odds of regions"
    assert [t.get_text() for t in figure.axes[1].texts] == [
        "VIP1",
        "VIP2/3",
        "VIP5",
        "VIP6",
        "CCB",
        "CA1p",
        "DGY",
        "CA1p",
    ]


def test_figures_for_papers_hold_text_that_can_be_edited(findings, tmp_path):
    svg, pdf = write_sections(findings, tmp_path)
    assert re.search(r"<text[^>]*>odds of regions</text>", svg.read_text())
    assert "mathdefault" not in svg.read_text()
    first = svg.read_bytes()
    write_sections(findings, tmp_path)
    assert svg.read_bytes() == first
    assert b"/Type /Font" in pdf.read_bytes()
    assert b"/FontFile2" in pdf.read_bytes()  # TrueType, not shapes


def test_stretch_is_the_slope_of_depth_over_distance():
    tip = np.arange(0.0, 1000.0, 20.0)
    assert np.allclose(local_stretch(tip, 3000 - 1.3 * tip), 1.3)
    assert local_stretch(np.array([5.0]), np.array([100.0])).tolist() == [1.0]


def test_odds_of_a_row_sum_to_one_and_contacts_of_a_row_are_averaged():
    channels = pd.DataFrame({"channel": [0, 1, 2], "tip_distance_um": [0.0, 0.0, 20.0]})
    odds = pd.DataFrame(
        {"channel": [0, 1, 1, 2, 2], "region_id": [7, 7, 8, 8, 9], "probability": [1.0, 0.5, 0.5, 0.995, 0.005]}
    )
    heights, ids, share = shares(odds, channels)
    assert heights.tolist() == [0.0, 20.0]
    assert ids.tolist() == [7, 8, -1]
    assert np.allclose(share, [[0.75, 0.25, 0.0], [0.0, 0.995, 0.005]])


def test_nothing_is_drawn_where_nothing_was_measured():
    height = np.array([500.0, 480.0, 460.0, 100.0, 80.0])
    wide, values = with_gaps(height, np.arange(10.0).reshape(5, 2))
    assert wide.tolist() == [500, 480, 460, 440, 120, 100, 80]
    assert np.isnan(values[3:5]).all()
    assert values[[0, 1, 2, 5, 6]].tolist() == np.arange(10.0).reshape(5, 2).tolist()
    assert with_gaps(height[:1], np.ones((1, 3)))[0].tolist() == [500.0]

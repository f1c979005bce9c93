"""``leadline compare`` as typed."""

import json

import pytest
from tests.finished_brain import truth_text, write_finished_brain
from typer.testing import CliRunner

from leadline.cli.main import app


@pytest.fixture(scope="module")
def brains(tmp_path_factory):
    folder = tmp_path_factory.mktemp("compare")
    return [write_finished_brain(folder / n, name=n, shift_um=s) for n, s in (("ann", 0.0), ("bob", 60.0))]


def type_in(*words):
    return CliRunner().invoke(app, ["compare", *map(str, words)], catch_exceptions=False).stdout


def test_it_says_depth_agreement_and_kappa(brains):
    text = type_in(*(b.folder for b in brains))
    assert "ann and bob: 32 channels in both" in text
    assert "bob lies +60 um deeper (median)" in text
    assert "depth apart: 60 um (median), 60 um (95th percentile)" in text
    assert "coarse_region: same in" in text
    assert "Cohen's kappa 0." in text


def test_a_reference_ranks_the_readings(brains, tmp_path):
    truth = tmp_path / "truth.csv"
    truth.write_text(truth_text(brains[0]))
    said = json.loads(type_in(*(b.file for b in brains), "--truth", truth, "-o", tmp_path / "c", "--json"))
    assert said["first_against_truth"]["difference"]["depth_abs_median_um"] == 0.0
    assert said["second_against_truth"]["difference"]["depth_median_um"] == 60.0
    assert said["first_against_truth"]["agreement"]["region"]["kappa"] == 1.0
    assert len(said["files"]) == 9
    assert sorted(p.name for p in (tmp_path / "c").iterdir())[:3] == [
        "comparison.csv",
        "comparison.png",
        "comparison.svg",
    ]

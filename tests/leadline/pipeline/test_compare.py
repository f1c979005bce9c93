"""Two readings of one brain."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sklearn.metrics import cohen_kappa_score
from tests.finished_brain import write_finished_brain

from leadline.base.errors import LeadlineError
from leadline.pipeline.compare import (
    Reading,
    cohens_kappa,
    compare,
    comparison_json,
    comparison_rows,
    name_apart,
    read_reading,
)
from leadline.report.comparison import draw_comparison


@pytest.fixture(scope="module")
def pair(tmp_path_factory):
    folder = tmp_path_factory.mktemp("pair")
    brains = [write_finished_brain(folder / n, shift_um=s) for n, s in (("ann", 0.0), ("bob", 60.0))]
    return [read_reading(b.file) for b in brains], [b.folder for b in brains]


def test_a_shift_is_found_to_the_micrometre(pair):
    (ann, bob), _ = pair
    found = compare(ann, bob)
    assert len(found.rows) == 32
    assert (found.difference.depth_median_um, found.difference.depth_abs_p95_um) == (60.0, 60.0)
    assert found.difference.apart_median_um == 60.0
    rows = comparison_rows(found)
    assert (rows["depth_difference_um"] == 60.0).all()
    assert rows["same_region"].mean() == pytest.approx(found.agreement["region"].share, abs=1e-4)
    assert 0.5 < found.agreement["region"].share < 1.0


def test_a_reading_agrees_with_itself(pair):
    (ann, _), _ = pair
    found = compare(ann, Reading("again", ann.table))
    assert found.difference.depth_abs_p95_um == 0.0
    assert {a.share for a in found.agreement.values()} == {1.0}
    assert {a.kappa for a in found.agreement.values()} == {1.0}
    said = comparison_json(found)
    assert said["agreement"]["layer"]["channels"] == (ann.table["layer"] != "").sum()
    assert list(said["by_penetration"]) == ["A"]


names = st.lists(st.sampled_from(["CA1", "CA3", "DG", "VIP5"]), min_size=2, max_size=40)


@given(names, st.randoms(use_true_random=False))
def test_kappa_is_scikit_learns(one, random):
    """The outside check: scikit-learn's cohen_kappa_score, of which Leadline does not depend."""
    two = [name if random.random() < 0.7 else random.choice(["CA1", "CA3", "DG", "VIP5"]) for name in one]
    found = cohens_kappa(np.array(one, dtype=object), np.array(two, dtype=object))
    if found is None:
        assert set(one) == set(two)
        assert len(set(one)) == 1
    else:
        assert found == pytest.approx(cohen_kappa_score(one, two), abs=1e-4)


def test_kappa_of_the_worked_example_of_its_article():
    """Cohen (1960), table 1, from memory: po = .70, pe = .41, kappa = .492."""
    joint = {("a", "a"): 44, ("a", "b"): 5, ("a", "c"): 1, ("b", "a"): 7, ("b", "b"): 20, ("b", "c"): 3,
             ("c", "a"): 9, ("c", "b"): 5, ("c", "c"): 6}  # fmt: skip
    pairs = [pair for pair, times in joint.items() for _ in range(times)]
    one, two = (np.array([p[k] for p in pairs], dtype=object) for k in (0, 1))
    assert cohens_kappa(one, two) == pytest.approx(0.492, abs=0.001)


def test_channels_of_one_side_alone_and_those_not_located_are_counted_apart(pair):
    (ann, bob), _ = pair
    less = bob.table.iloc[:30].copy()
    less.loc[less.index[0], "region"] = "not located"
    found = compare(ann, Reading("less", less))
    assert (len(found.rows), found.only_first, found.only_second) == (29, 2, 0)


def test_a_reference_needs_only_the_columns_it_has(pair, tmp_path):
    (ann, bob), _ = pair
    truth = tmp_path / "truth.csv"
    ann.table[["penetration", "channel", "region"]].to_csv(truth, index=False)
    found = compare(read_reading(truth), bob)
    assert found.difference.depth_median_um is None
    assert list(found.agreement) == ["region"]
    assert set(comparison_rows(found)) == {
        "penetration", "channel", "tip_distance_um", "region_first", "region_second", "same_region"
    }  # fmt: skip


def test_readings_of_one_name_are_told_apart_by_their_folders(pair):
    readings, folders = pair
    assert [r.name for r in name_apart(zip(readings, folders, strict=True))] == ["ann", "bob"]
    same = [(readings[0], folders[0]), (readings[0], folders[0] / "brain.toml")]
    assert [r.name for r in name_apart(same)] == ["ann (1)", "ann (2)"]


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda t: t.assign(penetration="Z"), "no channel in common"),
        (
            lambda t: t.assign(tip_distance_um=t["tip_distance_um"] + 175),
            "is 100 um from the tip in tiny-01 and 275 um",
        ),
    ],
)
def test_readings_of_other_recordings_are_refused(pair, change, words):
    (ann, _), _ = pair
    with pytest.raises(LeadlineError, match=words):
        compare(ann, Reading("other", change(ann.table)))


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("penetration,region\nA,x\n", "column 'channel' is missing"),
        ("penetration,channel\nA,1\nA,1\n", "channel 1 of penetration A has two rows"),
        ("penetration,channel\nA,one\n", "line 2, column 'channel'"),
    ],
)
def test_a_table_that_is_none_of_channels_is_told(tmp_path, text, words):
    path = tmp_path / "t.csv"
    path.write_text(text)
    with pytest.raises(LeadlineError, match=words):
        read_reading(path)


def test_the_picture_shows_both_readings_and_where_they_part(pair):
    from leadline.io.atlases import read_atlas

    (ann, bob), _ = pair
    found = compare(ann, bob)
    figure = draw_comparison(found, read_atlas(ann.atlas).structures)
    first, middle, second = figure.axes
    assert [t.get_text() for t in first.texts] == ["DGY", "CA1p", "CCB", "VIP6", "VIP5", "VIP2/3"]
    drawn = sum(len(c.get_offsets()) for c in middle.collections)
    assert drawn == 32
    assert [t.get_text() for t in second.texts][-1] == "VIP2/3"
    assert "median depth difference 60 um" in figure.get_suptitle()
    draw_comparison(compare(ann, Reading("t", bob.table.drop(columns=["track_depth_um"]))), None)


def test_parquet_and_csv_of_one_brain_read_alike(pair):
    (ann, _), (folder, _) = pair
    csv = read_reading(folder / "out" / "channels.csv")
    pd.testing.assert_frame_equal(csv.table[["channel", "region", "layer"]], ann.table[["channel", "region", "layer"]])

"""Tables written and read back."""

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.io.points import read_hand_points
from leadline.io.tables import (
    anchors_text,
    numbers,
    read_anchors,
    read_csv,
    read_suggestions,
    suggestions_text,
    table_text,
    write_table,
)
from leadline.model.anchor import Anchor, Suggestion

words = st.text(st.characters(blacklist_categories=("Cs", "Cc")), max_size=30)
um = st.floats(-5000, 9000, allow_nan=False)
anchors = st.lists(
    st.builds(Anchor, st.sampled_from(["A", "=B", "p 1"]), st.integers(0, 3), um, um, st.floats(0.1, 500), words,
              st.sampled_from(["user", "auto"]), words),
    max_size=6,
)  # fmt: skip


@given(anchors)
def test_anchors_are_read_back_to_the_last_bit(tmp_path_factory, many):
    path = tmp_path_factory.mktemp("a") / "anchors.csv"
    path.write_text(anchors_text(many), encoding="utf-8", newline="")
    assert read_anchors(path) == tuple(many)


def test_no_file_means_no_anchors(tmp_path):
    assert read_anchors(tmp_path / "anchors.csv") == ()


def test_suggestions_carry_their_reasons(tmp_path):
    made = Suggestion(
        Anchor("A", 0, 100.0, 2000.0, 25.0, "CA1 pyramidal layer"), "ripple power, 5.2", "spike width, 0.6"
    )
    (tmp_path / "s.csv").write_text(suggestions_text([made]))
    assert read_suggestions(tmp_path / "s.csv") == (made,)


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ("A,0,abc,100,40,,user,", "line 2: is not an anchor"),
        ("A,0,1,nan,40,,user,", "track_depth_um is not a finite number"),
        ("A,0,1,2,-4,,user,", "sd_um must be positive"),
        ("A,0,1,2,4,,robot,", "source is 'robot'"),
        ('A,0,1,2,4,"x,user,', "cannot be read as CSV"),
    ],
)
def test_a_broken_anchor_line_is_named(tmp_path, line, words):
    path = tmp_path / "anchors.csv"
    path.write_text("penetration,shank,tip_distance_um,track_depth_um,sd_um,landmark,source,note\n" + line + "\n")
    with pytest.raises(LeadlineError, match=words):
        read_anchors(path)


def test_a_formula_in_a_name_is_not_run_by_a_spreadsheet(tmp_path):
    write_table(pd.DataFrame({"region": ["=1+1", "VA"], "n": [1, -2]}), tmp_path / "t.csv")
    assert (tmp_path / "t.csv").read_text() == "region,n\n'=1+1,1\nVA,-2\n"


def test_nor_is_one_in_the_name_of_a_column_or_among_numbers():
    mixed = pd.DataFrame({"@sum(A1)": ["-", "-5", "+cmd|x", 3.5, None]})
    assert table_text(mixed).split("\n") == ["'@sum(A1)", "-", "-5", "'+cmd|x", "3.5", '""', ""]


@given(st.text(st.sampled_from("'=+-@5a"), max_size=5))
def test_a_guarded_note_is_read_back_as_it_was(tmp_path_factory, note):
    path = tmp_path_factory.mktemp("a") / "anchors.csv"
    anchor = Anchor("A", 0, 1.0, 2.0, 3.0, "", "user", note)
    path.write_text(anchors_text([anchor]))
    assert read_anchors(path) == (anchor,)


def test_a_missing_column_names_the_nearest(tmp_path):
    (tmp_path / "t.csv").write_text("s0_um,s1_um,s2\n1,2,3\n")
    with pytest.raises(LeadlineError, match=r"column 's2_um' is missing\. Did you mean 's"):
        read_hand_points(tmp_path / "t.csv")


def test_a_cell_that_is_no_number_is_named_by_line(tmp_path):
    (tmp_path / "t.csv").write_text("a,b\n1,2\n3,x\n")
    table = read_csv(tmp_path / "t.csv", ["a", "b"], what="points")
    with pytest.raises(LeadlineError, match="line 3, column 'b': 'x' is not a finite number"):
        numbers(table, ["a", "b"], tmp_path / "t.csv")


def test_an_empty_table_is_refused(tmp_path):
    (tmp_path / "t.csv").write_text("")
    with pytest.raises(LeadlineError, match="cannot be read as a CSV table of points"):
        read_csv(tmp_path / "t.csv", ["a"], what="points")


def test_hand_points_come_by_shank_in_file_order(tmp_path):
    (tmp_path / "p.csv").write_text("s0_um,s1_um,s2_um,shank\n0,0,0,1\n5,5,5,0\n1,1,1,1\n6,6,6,0\n")
    found = read_hand_points(tmp_path / "p.csv")
    assert found[1].tolist() == [[0, 0, 0], [1, 1, 1]]
    assert found[0].tolist() == [[5, 5, 5], [6, 6, 6]]


def test_a_track_of_one_point_is_refused(tmp_path):
    (tmp_path / "p.csv").write_text("s0_um,s1_um,s2_um\n0,0,0\n")
    with pytest.raises(LeadlineError, match="a track needs at least two"):
        read_hand_points(tmp_path / "p.csv")

import numpy as np
import pytest

from leadline.base.errors import LeadlineError
from leadline.io.points import pairs_text, read_pairs, read_track_edits, track_edits_text
from leadline.model.track import HandTrack


def test_hand_drawn_tracks_come_back_bit_for_bit(tmp_path):
    rng = np.random.default_rng(4)
    edits = {
        ("007", 0): HandTrack(rng.normal(size=(3, 3)) * 1e3),
        ("=sum", 2): HandTrack(rng.normal(size=(2, 3)), True),
    }
    file = tmp_path / "track_edits.csv"
    file.write_text(track_edits_text(edits))
    back = read_track_edits(file)
    assert list(back) == [("007", 0), ("=sum", 2)]
    assert all((back[key].points_um == drawn.points_um).all() for key, drawn in edits.items())
    assert [drawn.entry_set for drawn in back.values()] == [False, True]


def test_points_are_ordered_by_their_number_not_by_their_line(tmp_path):
    file = tmp_path / "track_edits.csv"
    file.write_text("penetration,shank,s0_um,s1_um,s2_um,order\nA,0,3,0,0,10\nA,0,1,0,0,0\nA,0,2,0,0,2\n")
    assert read_track_edits(file)["A", 0].points_um[:, 0].tolist() == [1.0, 2.0, 3.0]
    assert not read_track_edits(file)["A", 0].entry_set


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("penetration,shank,s0_um,s1_um,order\nA,0,1,2,0\n", "column 's2_um' is missing"),
        ("penetration,shank,s0_um,s1_um,s2_um,order\nA,0,1,2,x,0\n", "line 2: is no point"),
        ("penetration,shank,s0_um,s1_um,s2_um,order\nA,0,1,2,3,0\n", "at least two"),
        ("penetration,shank,s0_um,s1_um,s2_um,order\nA,0,1,2,3,0\nA,0,1,2,nan,1\n", "finite"),
    ],
)
def test_a_broken_file_is_refused_in_words(tmp_path, text, words):
    file = tmp_path / "track_edits.csv"
    file.write_text(text)
    with pytest.raises(LeadlineError, match=words):
        read_track_edits(file)


def test_no_file_means_nothing_drawn_and_no_pairs(tmp_path):
    assert read_track_edits(tmp_path / "none.csv") == {}
    assert read_pairs(tmp_path / "none.csv")[0].shape == (0, 3)


def test_pairs_come_back_bit_for_bit(tmp_path):
    stack, atlas = np.random.default_rng(5).normal(size=(2, 4, 3)) * 1e4
    file = tmp_path / "pairs.csv"
    file.write_text(pairs_text(stack, atlas))
    back = read_pairs(file)
    assert (back[0] == stack).all()
    assert (back[1] == atlas).all()

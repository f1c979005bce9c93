"""The user's unit table."""

import pytest

from leadline.base.errors import LeadlineError
from leadline.io.units import read_unit_table


def written(folder, text):
    path = folder / "units.csv"
    path.write_text(text)
    return path


def test_ids_come_out_as_spike_tables_write_them(tmp_path):
    table = read_unit_table(written(tmp_path, "unit_id,tag\n1,a\n12,b\n"))
    assert table["unit_id"].tolist() == ["1", "12"]
    assert read_unit_table(written(tmp_path, "unit_id\n1.0\n2.0\n"))["unit_id"].tolist() == ["1", "2"]
    assert read_unit_table(written(tmp_path, "unit_id\n u1\nu2 \n"))["unit_id"].tolist() == ["u1", "u2"]


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("id,tag\n1,a\n", "column 'unit_id' is missing"),
        ("unit_id,tag\n1,a\n1,b\n", "line 3: unit '1' has two rows"),
        ("unit_id,tag\n1,a\n,b\n", "line 3: 'unit_id' is empty"),
        ("unit_id,recording\n1,one\n", "'recording' holds something else"),
    ],
)
def test_a_wrong_table_is_told_by_line(tmp_path, text, words):
    with pytest.raises(LeadlineError, match=words):
        read_unit_table(written(tmp_path, text))


def test_one_id_in_two_recordings_is_two_units(tmp_path):
    table = read_unit_table(written(tmp_path, "unit_id,recording,tag\n1,1,a\n1,2,b\n"))
    assert table["tag"].tolist() == ["a", "b"]

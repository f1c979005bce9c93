import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leadline.atlas.importing import LARGEST_ID, structures_from, whole_number
from leadline.base.errors import LeadlineError
from leadline.model.atlas import Structures


def rows_of(content):
    return structures_from(content, where="table").rows


def test_a_tree_with_children_gives_parents_and_colours():
    tree = {
        "success": True,
        "id": 0,
        "msg": [
            {
                "id": 997,
                "acronym": "root",
                "name": "root",
                "color_hex_triplet": "FFFFFF",
                "parent_structure_id": None,
                "children": [
                    {"id": 8, "acronym": "grey", "name": "Grey", "color_hex_triplet": "0A0b0C", "children": []},
                    {"id": 614454277, "acronym": "X", "name": "Thing", "rgb_triplet": [1, 2, 255], "children": []},
                ],
            }
        ],
    }
    rows = rows_of(tree)
    assert [(r.id, r.acronym, r.parent_id, r.colour) for r in rows] == [
        (997, "root", None, "#ffffff"),
        (8, "grey", 997, "#0a0b0c"),
        (614454277, "X", 997, "#0102ff"),
    ]
    assert rows_of([tree["msg"][0]]) == rows == rows_of(tree["msg"][0])


@pytest.mark.parametrize(
    "record",
    [
        {"id": "5", "acronym": "A", "name": "Area", "parent_id": "1", "colour": "#102030"},
        {"ID": "5.0", "Abbreviation": "A", "Full name": "Area", "Parent structure ID": "1.0", "Color": "102030"},
        {"index": "5", "abbrev": "A", "label": "Area", "parent": "R", "red": "16", "green": "32", "blue": "48"},
        {"structure_id": 5, "acronym": "A", "name": "Area", "structure_id_path": "/1/5/", "rgb": "16, 32, 48"},
        {"label": "5", "acronym": "A", "name": "Area", "parent": "Root", "r": "16", "g": "32", "b": "48"},
    ],
)
def test_columns_are_known_by_their_usual_names(record):
    root = dict.fromkeys(record, "") | {next(iter(record)): "1"}
    keys = {re.sub(r"\s", "_", key.lower()): key for key in record}
    root[keys.get("acronym", keys.get("abbreviation", keys.get("abbrev")))] = "R"
    root[next(k for k in (keys.get("name"), keys.get("full_name"), keys.get("label")) if k)] = "Root"
    row = rows_of([root, record])[1]
    assert (row.id, row.acronym, row.name, row.parent_id, row.colour) == (5, "A", "Area", 1, "#102030")


@settings(deadline=None)
@given(st.integers(1, LARGEST_ID))
def test_ids_are_exact(identity):
    assert (
        whole_number(str(identity), "") == whole_number(f"{identity}.0", "") == whole_number(identity, "") == identity
    )


@pytest.mark.parametrize("text", ["-4", "1.5", "", "1e3", "4294967296", "x", None, "nan"])
def test_other_ids_are_refused(text):
    with pytest.raises(LeadlineError, match=r"t, structure 1: the id is .* from 1 to 4294967295"):
        structures_from([{"id": text, "name": "a"}], where="t")


@pytest.mark.parametrize(
    ("records", "words"),
    [
        ([], "the structure table is empty"),
        ("text", "no list of structures"),
        ([{"name": "a"}], "no column for id among name"),
        ([{"id": 1}], "no column for name among id"),
        ([{"id": 1, "name": "a"}, {"id": 1, "name": "b"}], r"id 1 has two rows \(a and b\)"),
        ([{"id": 1, "name": "a", "parent": "Q"}], r"the parent 'Q' of structure 1 \(a\) has no row"),
        ([{"id": 1, "name": "a", "color": "red"}], "the colour is 'red'"),
        ([{"id": 1, "name": "a", "r": 1, "g": 300, "b": 0}], "the colour is"),
        ([{"id": 1, "name": "a", "tissue": "gray"}], "tissue is 'gray'"),
    ],
)
def test_faults_of_a_table_are_named(records, words):
    with pytest.raises(LeadlineError, match=words):
        structures_from(records, where="t")


def test_all_faults_are_told_at_once():
    with pytest.raises(LeadlineError) as caught:
        structures_from([{"id": -1, "name": "a"}, {"id": 2, "name": ""}], where="t")
    assert "structure 1" in str(caught.value)
    assert "structure 2" in str(caught.value)


def test_id_zero_is_left_out_and_said():
    imported = structures_from([{"id": 0, "name": "Background"}, {"id": 3, "name": "A"}], where="t")
    assert [row.id for row in imported.rows] == [3]
    assert any("id 0" in note for note in imported.notes)


def test_structures_without_colour_get_one_each_and_a_flat_table_stands_alone():
    imported = structures_from([{"id": k, "name": f"n{k}"} for k in range(1, 40)], where="t")
    assert len({row.colour for row in imported.rows}) > 35
    assert any("no parents" in note for note in imported.notes)
    assert Structures(imported.rows)[7].acronym == "n7"

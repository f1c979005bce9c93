"""``leadline units`` as typed."""

import json

import pandas as pd
import pytest
from tests.finished_brain import write_finished_brain
from typer.testing import CliRunner

from leadline.cli.main import app


@pytest.fixture(scope="module")
def brains(tmp_path_factory):
    folder = tmp_path_factory.mktemp("brains")
    return [write_finished_brain(folder / name, name=name) for name in ("one", "two")]


def type_in(*words):
    return CliRunner().invoke(app, ["units", *map(str, words)], catch_exceptions=False)


def test_one_brain_gets_its_tables_and_its_picture(brains):
    result = type_in(brains[0].folder, "--value", "cell_type", "--json")
    said = json.loads(result.stdout)
    assert said["units"] == 12
    assert [p.rsplit("/", 1)[1] for p in said["pictures"]] == ["units_cell_type.png", "units_cell_type.svg"]
    csv, parquet = pd.read_csv(brains[0].out / "units.csv"), pd.read_parquet(brains[0].out / "units.parquet")
    assert csv["region"].tolist() == parquet["region"].tolist()
    assert (brains[0].out / "units_cell_type.png").read_bytes()[:4] == b"\x89PNG"


def test_many_brains_are_pooled_into_one_picture(brains, tmp_path):
    result = type_in(*(b.folder for b in brains), "--value", "orientation_deg", "--period", "180", "-o", tmp_path)
    assert "one: 12 units in 6 regions" in result.stdout
    assert "of 22 units in 2 brains" in (tmp_path / "units_orientation_deg.svg").read_text()


def test_a_second_call_changes_no_table(brains):
    type_in(brains[1].folder, "-q")
    before = {p.name: p.read_bytes() for p in brains[1].out.glob("*.*")}
    assert type_in(brains[1].folder, "-q").stdout == ""
    assert before == {p.name: p.read_bytes() for p in brains[1].out.glob("*.*")}

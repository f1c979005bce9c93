"""Cortical depth of a brain's atlas: solved once, kept, and appended to the channel table as the settings say."""

import csv
import io
from dataclasses import replace

import pandas as pd
import pytest
from tests.finished_brain import write_finished_brain

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.pipeline import laminar, work
from leadline.pipeline.bench import Bench
from leadline.pipeline.check import check

VISUAL = "mouse visual cortex"


@pytest.fixture(scope="module")
def brain(tmp_path_factory):
    return write_finished_brain(tmp_path_factory.mktemp("brain"))


@pytest.fixture
def without_layers(tmp_path):
    """The brain in an atlas that names no layer."""
    brain = write_finished_brain(tmp_path)
    file = brain.atlas / "structures.csv"
    rows = list(csv.DictReader(io.StringIO(file.read_text())))
    text = io.StringIO()
    writer = csv.DictWriter(text, rows[0], lineterminator="\n")
    writer.writeheader()
    writer.writerows({**row, "layer": ""} for row in rows)
    file.write_text(text.getvalue())
    return brain


def choose(brain, **layer_fractions):
    locate = replace(brain.settings.locate, layer_fractions=tuple(layer_fractions.items()))
    return replace(brain, settings=replace(brain.settings, locate=locate))


def table_of(brain):
    notes = work.locate(Bench(brain))
    return pd.read_csv(brain.out / "channels.csv", keep_default_na=False), notes


def test_channels_in_cortex_have_a_depth_that_grows_toward_white_matter(brain):
    table = pd.read_csv(brain.out / "channels.csv")
    assert list(table.columns[-2:]) == list(laminar.COLUMNS)
    cortex = table[table["coarse_region"] == "CTX"].sort_values("track_depth_um")
    assert len(cortex) > 5
    assert cortex["cortical_depth"].between(0, 1).all()
    assert (cortex["cortical_depth"].diff().dropna() > 0).all()
    assert (cortex["layer_source"] == "atlas").all()
    assert table.loc[table["coarse_region"] != "CTX", "cortical_depth"].isna().all()


def test_it_is_solved_once_and_again_when_the_atlas_changes_or_the_file_is_damaged(brain, tmp_path, monkeypatch):
    times = []
    real = laminar.laminar.cortical_depth
    monkeypatch.setattr(laminar.laminar, "cortical_depth", lambda atlas: times.append(1) or real(atlas))
    moved = write_finished_brain(tmp_path)
    assert len(times) == 1
    laminar.cortical_depth(Bench(moved))
    assert len(times) == 1
    (moved.cache / "cortical_depth.npz").write_bytes(b"PK spoilt")
    laminar.cortical_depth(Bench(moved))
    assert len(times) == 2
    with (moved.atlas / "atlas.toml").open("a") as file:
        file.write("# changed\n")
    laminar.cortical_depth(Bench(moved))
    assert len(times) == 3


def test_no_layer_is_invented_and_a_chosen_set_is_named(without_layers):
    table, _ = table_of(without_layers)
    assert set(table["layer"]) == set(table["layer_source"]) == {""}
    table, notes = table_of(choose(without_layers, CTX=VISUAL))
    cortex = table[table["coarse_region"] == "CTX"]
    assert notes == ()
    assert set(cortex["layer_source"]) == {f"fractions: {VISUAL}"}
    order = list(dict.fromkeys(cortex.sort_values("track_depth_um")["layer"]))
    assert order == ["1", "2/3", "4", "5", "6a"][: len(order)]
    assert len(order) > 2
    assert set(table.loc[table["coarse_region"] != "CTX", "layer"]) == {""}


def test_the_layers_of_the_atlas_stand_above_a_chosen_set(brain, tmp_path):
    usual, _ = table_of(brain)
    table, _ = table_of(choose(brain, CTX=VISUAL))
    assert table["layer"].tolist() == usual["layer"].tolist()


def test_the_setting_is_read_and_checked(brain, tmp_path):
    there = write_finished_brain(tmp_path)
    text = there.file.read_text()
    there.file.write_text(text + f'\n[settings.locate]\nlayer_fractions = {{ VIP = "{VISUAL}" }}\n')
    found = read_brain(there.file)
    assert found.settings.locate.layer_fractions == (("VIP", VISUAL),)
    assert check(found).faults == ()
    (fault,) = check(choose(found, VIB=VISUAL)).faults
    assert "Did you mean 'VIP'?" in str(fault)
    with pytest.raises(LeadlineError, match="layer_fractions"):
        work.locate(Bench(choose(found, VIP="mouse cortex")))
    there.file.write_text(text + '\n[settings.locate]\nlayer_fractions = "mouse"\n')
    with pytest.raises(LeadlineError, match="is not a table of words"):
        read_brain(there.file)


def test_an_atlas_whose_cortex_meets_no_white_matter_is_said_to_give_no_depth(without_layers):
    file = without_layers.atlas / "structures.csv"
    file.write_text(file.read_text().replace("white", "grey"))
    table, notes = table_of(without_layers)
    assert "cortical_depth" not in table.columns
    assert "white matter" in notes[0]

"""Units where their spikes place them, on a brain whose results were written by hand."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.finished_brain import write_finished_brain

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.model.posterior import DepthPosterior
from leadline.model.recording import Spikes
from leadline.pipeline.finished import is_current
from leadline.pipeline.units import UNIT_COLUMNS, pool, posterior_at, require_value, unit_places, unit_table


@pytest.fixture(scope="module")
def brain(tmp_path_factory):
    return write_finished_brain(tmp_path_factory.mktemp("units"))


@pytest.fixture(scope="module")
def table(brain):
    return unit_table(brain)


def test_a_unit_on_a_contact_is_located_as_the_contact_is(brain, table):
    channels = pd.read_csv(brain.out / "channels.csv").set_index("tip_distance_um")
    unit = table.set_index("unit_id").loc["u0"]
    contact = channels.loc[100.0]
    for column in (
        "track_depth_um",
        "track_depth_sd_um",
        "ap_um",
        "dv_um",
        "ml_um",
        "region",
        "boundary_um",
        "channel",
    ):
        assert unit[column] == contact[column]


def test_a_unit_between_contacts_lies_between_them(table):
    unit = table.set_index("unit_id").loc["u1"]  # 230 um from the tip; the draws' median is 1700 - tip distance
    assert unit["track_depth_um"] == pytest.approx(1470.0, abs=0.01)
    assert unit["channel"] == 3


def test_columns_are_ours_then_the_users(table):
    assert tuple(table.columns[: len(UNIT_COLUMNS)]) == UNIT_COLUMNS
    assert list(table.columns[-4:]) == ["cell_type", "latency_ms", "orientation_deg", "region_user"]
    row = table.set_index("unit_id").loc["u3"]
    assert (row["cell_type"], row["latency_ms"], row["region_user"]) == ("narrow", 29, "mine")
    assert table.set_index("unit_id").loc["u11", ["cell_type", "latency_ms"]].isna().all()


def test_units_in_cortex_have_a_cortical_depth_that_grows_with_their_depth(table):
    cortical = table[table["coarse_region"] == "CTX"].sort_values("track_depth_um")
    assert (cortical["cortical_depth"].diff().dropna() > 0).all()
    assert cortical["cortical_depth"].between(0, 1).all()
    assert set(cortical["layer_source"]) == {"atlas"}
    assert table.loc[table["coarse_region"] != "CTX", "cortical_depth"].isna().all()


def test_every_unit_has_one_row_and_all_its_spikes(brain, table):
    spikes = pd.read_csv(brain.folder / "a_spikes.csv")
    assert table["n_spikes"].sum() == len(spikes)
    assert dict(zip(table["unit_id"], table["n_spikes"], strict=True)) == spikes["unit_id"].value_counts().to_dict()


def test_a_unit_is_at_home_on_the_shank_of_most_of_its_spikes():
    spikes = Spikes(
        np.arange(5.0), np.zeros(5, int), np.array([10.0, 20, 400, 30, 500]), np.array([1, 1, 0, 1, 0]), ("only",)
    )
    places = unit_places(spikes)
    assert (places.tip_distance_um.tolist(), places.shank.tolist(), places.n_spikes.tolist()) == ([20.0], [1], [5])


@settings(max_examples=40, deadline=None)
@given(st.lists(st.floats(-500, 3000), min_size=1, max_size=8, unique=True), st.integers(0, 9))
def test_the_posterior_between_rows_is_its_rows_and_never_folds(tips, seed):
    rng = np.random.default_rng(seed)
    rows = np.sort(rng.choice(np.arange(0, 2000, 20.0), 12, replace=False))
    draws = 3000 - np.cumsum(rng.uniform(0.5, 1.5, (6, 12)) * np.diff(rows, prepend=0.0), axis=1)
    posterior = DepthPosterior("A", 0, rows, draws)
    assert np.array_equal(posterior_at(posterior, rows).depth_um, draws)
    asked = np.unique(np.array(tips))
    found = posterior_at(posterior, asked).depth_um
    assert (np.diff(found, axis=1) < 1e-9).all()
    beyond = asked > rows[-1]
    assert np.allclose(found[:, beyond], draws[:, -1:] - (asked[beyond] - rows[-1]))


def test_pooling_asks_for_one_atlas_and_two_names(brain, table, tmp_path):
    other = write_finished_brain(tmp_path / "other", name="tiny-02")
    assert len(pool([brain, other], [table, unit_table(other)])) == 24
    with pytest.raises(LeadlineError, match="two brains are named 'tiny-01'"):
        pool([brain, brain], [table, table])
    toml = other.atlas / "atlas.toml"
    toml.write_text(toml.read_text().replace("Tiny atlas", "Another"))
    with pytest.raises(LeadlineError, match="which differ"):
        pool([brain, other], [table, table])


def test_a_value_must_be_there(table):
    with pytest.raises(LeadlineError, match=r"no column 'latency'.*latency_ms"):
        require_value(table, "latency")
    with pytest.raises(LeadlineError, match="no located unit has"):
        require_value(table.assign(empty=np.nan), "empty")
    with pytest.raises(LeadlineError, match="no period"):
        require_value(table, "cell_type", 180.0)


def test_a_unit_table_of_other_units_is_refused(tmp_path):
    brain = write_finished_brain(tmp_path)
    (tmp_path / "a_units.csv").write_text("unit_id,tag\n1,a\n2,b\n")
    with pytest.raises(LeadlineError, match=r"none of its units \(1, 2\)"):
        unit_table(brain)


def test_the_same_id_in_two_recordings_is_two_units(tmp_path):
    brain = write_finished_brain(tmp_path)
    (tmp_path / "later.csv").write_text("time_s,unit_id,channel\n1,u0,4\n2,u0,4\n3,u99,9\n")
    (tmp_path / "a_units.csv").write_text("unit_id,recording,tag\nu0,1,early\nu0,2,late\n")
    text = brain.file.read_text()
    more = '[[penetration.recording]]\n  spikes = "later.csv"\n\n[[anchor]]'
    brain.file.write_text(text.replace("[[anchor]]", more))
    table = unit_table(read_brain(brain.file)).set_index(["recording", "unit_id"])
    assert len(table) == 14
    assert table.loc[(1, "u0"), ["tag", "n_spikes", "channel"]].tolist() == ["early", 29, 0]
    assert table.loc[(2, "u0"), ["tag", "n_spikes", "channel"]].tolist() == ["late", 2, 4]


def test_a_brain_without_spikes_says_so(tmp_path):
    brain = write_finished_brain(tmp_path)
    text = brain.file.read_text().replace('spikes = "a_spikes.csv"', "")
    brain.file.write_text(text)
    with pytest.raises(LeadlineError, match="no recording names a table of spikes"):
        unit_table(read_brain(brain.file))


def test_a_finished_brain_is_current_until_an_input_changes(tmp_path):
    brain = write_finished_brain(tmp_path)
    assert is_current(brain)
    (tmp_path / "a_points.csv").write_text((tmp_path / "a_points.csv").read_text() + "1000,1000,1000\n")
    assert not is_current(read_brain(brain.file))

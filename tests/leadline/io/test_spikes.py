import numpy as np
import pandas as pd
import pytest

from leadline.base.errors import LeadlineError
from leadline.io.spikes import read_events, read_excluded, read_spikes
from leadline.model.probe import Probe


@pytest.fixture
def probe():
    """Two shanks of three contacts; trace 5 is wired to the first contact, one contact is not recorded."""
    return Probe(
        tuple("abcdef"), np.zeros(6), [0, 20, 40, 0, 20, 40], [0, 0, 0, 1, 1, 1], [5, 4, 3, 2, 1, -1], tip_offset_um=100
    )


@pytest.fixture
def line():
    return Probe(tuple("abc"), np.zeros(3), [0, 20, 40], [0, 0, 0], [0, 1, 2], tip_offset_um=100)


def written(tmp_path, text, suffix=".csv"):
    path = tmp_path / f"table{suffix}"
    path.write_text(text)
    return path


def test_channels_become_tip_distances_and_shanks_by_the_wiring(tmp_path, probe):
    path = written(tmp_path, "time_s,unit_id,channel\n0.5,7,5\n0.2,9,1\n0.3,7,5\n")
    spikes = read_spikes(path, probe)
    assert spikes.time_s.tolist() == [0.2, 0.3, 0.5]
    assert spikes.tip_distance_um.tolist() == [120.0, 100.0, 100.0]
    assert spikes.shank.tolist() == [1, 0, 0]
    assert spikes.unit_names == ("7", "9")
    assert spikes.unit_id.tolist() == [1, 0, 0]
    assert spikes.amplitude_uv is None


def test_parquet_tables_may_name_units_in_words_and_carry_amplitude_and_width(tmp_path, line):
    path = tmp_path / "s.parquet"
    pd.DataFrame(
        {
            "time_s": [0.1, 0.2],
            "unit_id": ["good one", "b"],
            "tip_distance_um": [111.0, 130.0],
            "amplitude_uv": [-80.0, -60.0],
            "width_s": [4e-4, 2e-4],
        }
    ).to_parquet(path)
    spikes = read_spikes(path, line)
    assert spikes.unit_names == ("b", "good one")
    assert spikes.unit_id.tolist() == [1, 0]
    assert spikes.amplitude_uv.tolist() == [-80.0, -60.0]
    assert spikes.width_s.tolist() == [4e-4, 2e-4]


def test_both_places_given_say_depth_and_shank(tmp_path, probe):
    path = written(tmp_path, "time_s,unit_id,channel,tip_distance_um\n0.5,1,2,112.5\n")
    spikes = read_spikes(path, probe)
    assert (spikes.tip_distance_um[0], spikes.shank[0]) == (112.5, 1)


def test_units_of_numbers_stand_in_the_order_of_numbers(tmp_path, line):
    path = written(tmp_path, "time_s,unit_id,channel\n0.5,10,0\n0.6,9,0\n0.7,100,0\n")
    assert read_spikes(path, line).unit_names == ("9", "10", "100")


def test_an_empty_table_is_no_spikes(tmp_path, line):
    assert read_spikes(written(tmp_path, "time_s,unit_id,channel\n"), line).time_s.size == 0


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("time_s,unit_id\n1,1\n", "column 'tip_distance_um' is missing"),
        ("times,unit_id,channel\n1,1,0\n", "column 'time_s' is missing. Did you mean 'times'"),
        ("time_s,unit_id,chanel\n1,1,0\n", "tip_distance_um or channel"),
        ("time_s,unit_id,channel\n1,1,0\n-0.5,1,0\n", "line 3, column 'time_s': -0.5 s lies before"),
        ("time_s,unit_id,channel\n1,1,0\nnan,1,0\n", "line 3, column 'time_s'.*not a finite"),
        ("time_s,unit_id,channel\n1,1,3\n", "line 2, column 'channel': 3 is no recorded channel"),
        ("time_s,unit_id,channel\n1,1,0.5\n", "0.5 is no recorded channel"),
        ("time_s,unit_id,channel\n1,,0\n", "line 2, column 'unit_id': is empty"),
        ("time_s,unit_id,tip_distance_um\n1,1,9000\n", "9000 um is more than 1 mm beyond"),
        ("time_s,unit_id,channel,shank\n1,1,0,3\n", "column 'shank': 3 is no shank"),
        ("time_s,unit_id,channel,width_s\n1,1,0,0.4\n", "0.4 s is no spike width"),
        ("time_s,unit_id,channel,amplitude_uv\n1,1,0,big\n", "column 'amplitude_uv'.*not a finite"),
    ],
)
def test_a_fault_is_named_by_line_and_column(tmp_path, line, text, words):
    with pytest.raises(LeadlineError, match=words):
        read_spikes(written(tmp_path, text), line)


def test_a_contact_that_was_not_recorded_has_no_spikes(tmp_path, probe):
    with pytest.raises(LeadlineError, match="-1 is no recorded channel"):
        read_spikes(written(tmp_path, "time_s,unit_id,channel\n1,1,-1\n"), probe)


def test_several_shanks_need_to_be_told_apart(tmp_path, probe):
    with pytest.raises(LeadlineError, match="has 2 shanks"):
        read_spikes(written(tmp_path, "time_s,unit_id,tip_distance_um\n1,1,110\n"), probe)


@pytest.mark.parametrize("reader", [read_events, read_excluded, lambda path: read_spikes(path, None)])
@pytest.mark.parametrize(
    ("name", "content", "words"),
    [
        ("none.csv", None, "no such file"),
        ("a.xlsx", b"x", "is no table"),
        ("a.nwb", b"x", "NWB"),
        ("a.parquet", b"not parquet", "cannot be read as a Parquet table"),
    ],
)
def test_files_that_are_no_tables_are_refused(tmp_path, reader, name, content, words):
    path = tmp_path / name
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(LeadlineError, match=words):
        reader(path)


def test_a_parquet_file_of_a_billion_equal_rows_is_refused_before_it_is_unpacked(tmp_path, line, monkeypatch):
    path = tmp_path / "s.parquet"
    rows = np.zeros(5_000_000)
    pd.DataFrame({"time_s": rows, "unit_id": rows, "tip_distance_um": rows}).to_parquet(path)
    assert path.stat().st_size < 600_000
    monkeypatch.setattr("pandas.read_parquet", lambda *_: pytest.fail("unpacked"))
    with pytest.raises(LeadlineError, match=r"promises 5000000 spikes, more than its \d+ bytes"):
        read_spikes(path, line)


def test_parquet_without_a_column_is_refused(tmp_path, line):
    path = tmp_path / "s.parquet"
    pd.DataFrame({"time_s": [0.1], "unitid": [1]}).to_parquet(path)
    with pytest.raises(LeadlineError, match=r"column 'unit_id' is missing. Did you mean 'unitid'"):
        read_spikes(path, line)


def test_events_are_put_in_the_order_of_time_and_may_have_no_kind(tmp_path):
    events = read_events(written(tmp_path, "time_s,kind\n2.0,flash\n1.0, tone \n"))
    assert events.time_s.tolist() == [1.0, 2.0]
    assert events.kind == ("tone", "flash")
    assert read_events(written(tmp_path, "time_s\n2.0\n")).kind == ("event",)
    with pytest.raises(LeadlineError, match="line 2, column 'time_s'"):
        read_events(written(tmp_path, "time_s,kind\n-2.0,flash\n"))


def test_excluded_intervals_are_sorted_and_joined(tmp_path):
    text = "start_s,stop_s\n5,6\n1,3\n2,4\n"
    assert read_excluded(written(tmp_path, text)).tolist() == [[1.0, 4.0], [5.0, 6.0]]
    assert read_excluded(written(tmp_path, "start_s,stop_s\n")).shape == (0, 2)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("start_s,stop_s\n1,2\n5,5\n", "line 3, column 'stop_s': 5 s does not lie after start_s 5 s"),
        ("start_s,stop_s\n-5,-3\n", "lies before the recording"),
        ("start_s,stop_s\n1,inf\n", "not a finite number"),
        ("start_s,end_s\n1,2\n", "column 'stop_s' is missing"),
    ],
)
def test_intervals_that_are_none_are_refused(tmp_path, text, words):
    with pytest.raises(LeadlineError, match=words):
        read_excluded(written(tmp_path, text))

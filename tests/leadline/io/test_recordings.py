from dataclasses import replace

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from leadline.base.errors import LeadlineError
from leadline.io.recordings import open_traces
from leadline.model.brain import RecordingSource


@pytest.fixture
def source(tmp_path):
    path = tmp_path / "a_lfp.bin"
    samples = np.arange(600 * 7, dtype="<i2").reshape(600, 7)
    samples.tofile(path)
    return RecordingSource(path, sampling_hz=500.0, n_channels=7, dtype="int16", uv_per_bit=0.5)


def test_samples_come_in_the_order_asked_for_and_in_microvolts(source):
    traces = open_traces(source)
    assert (traces.sampling_hz, traces.n_samples, traces.n_channels) == (500.0, 600, 7)
    block = traces.read_uv(10, 12, np.array([6, 0]))
    assert block.dtype == np.float32
    assert block.tolist() == [[38.0, 35.0], [41.5, 38.5]]


@settings(max_examples=30, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.integers(0, 600), st.integers(0, 700), st.lists(st.integers(0, 6), min_size=1, max_size=7, unique=True))
def test_any_block_is_the_slice_of_the_whole(source, start, length, channels):
    whole = np.arange(600 * 7, dtype=float).reshape(600, 7) * 0.5
    block = open_traces(source).read_uv(start, start + length, np.array(channels))
    assert np.array_equal(block, whole[start : start + length][:, channels])


def test_float_samples_are_microvolts_unless_told_otherwise(tmp_path):
    path = tmp_path / "f.bin"
    np.full((600, 2), 3.25, "<f4").tofile(path)
    source = RecordingSource(path, sampling_hz=500.0, n_channels=2, dtype="float32")
    assert open_traces(source).read_uv(0, 1, np.arange(2)).tolist() == [[3.25, 3.25]]
    assert open_traces(replace(source, uv_per_bit=1000.0)).read_uv(0, 1, np.arange(1)).tolist() == [[3250.0]]


def test_memory_does_not_grow_with_the_file(source):
    """A read gives an array of its own, and nothing of the file stays mapped."""
    block = open_traces(source).read_uv(0, 600, np.arange(7))
    base = block
    while base.base is not None:
        base = base.base
    assert not isinstance(base, np.memmap)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"sampling_hz": None}, "'sampling_hz' is missing"),
        ({"n_channels": None}, "'n_channels' is missing"),
        ({"dtype": None}, "'dtype' is missing"),
        ({"uv_per_bit": None}, "'uv_per_bit' is missing"),
        ({"dtype": "int61"}, r"dtype 'int61' cannot be read. Did you mean 'int16'"),
        ({"sampling_hz": -1.0}, "'sampling_hz' must be positive, is -1"),
        ({"uv_per_bit": float("nan")}, "'uv_per_bit' must be positive"),
        ({"n_channels": 0}, "'n_channels' must be positive, is 0"),
        ({"n_channels": 9}, r"no whole number of samples of 9 traces .* 10 or 8 traces would fit"),
        ({"sampling_hz": 2500.0}, "600 samples, 0.24 s at 2500 Hz"),
        ({"lfp": None}, "names no 'lfp' file"),
    ],
)
def test_a_wrong_key_is_answered_with_what_to_write(source, change, words):
    with pytest.raises(LeadlineError, match=words):
        open_traces(replace(source, **change))


def test_missing_empty_and_truncated_files_are_told_apart(source):
    with pytest.raises(LeadlineError, match="no such file"):
        open_traces(replace(source, lfp=source.lfp.with_name("b.bin")))
    data = source.lfp.read_bytes()
    source.lfp.write_bytes(data[:-3])
    with pytest.raises(LeadlineError, match=r"\(11 bytes are left over\)"):
        open_traces(source)
    source.lfp.write_bytes(b"")
    with pytest.raises(LeadlineError, match="is empty"):
        open_traces(source)


def test_samples_that_are_no_numbers_are_found_when_opened_or_read(tmp_path):
    path = tmp_path / "f.bin"
    samples = np.zeros((6000, 3), "<f4")
    samples[1500, 1] = np.nan
    samples.tofile(path)
    traces = open_traces(RecordingSource(path, sampling_hz=500.0, n_channels=3, dtype="float32"))
    with pytest.raises(LeadlineError, match="sample 1500 of trace 1 is not a finite number"):
        traces.read_uv(1000, 2000, np.array([0, 1]))
    samples[0, 2] = np.inf
    samples.tofile(path)
    with pytest.raises(LeadlineError, match="sample 0 of trace 2"):
        open_traces(RecordingSource(path, sampling_hz=500.0, n_channels=3, dtype="float32"))


def test_int16_read_as_float32_is_noticed(tmp_path):
    path = tmp_path / "i.bin"
    np.random.default_rng(1).integers(-3000, 3000, (6000, 4)).astype("<i2").tofile(path)
    with pytest.raises(LeadlineError, match=r"no electrode gives|not a finite number"):
        open_traces(RecordingSource(path, sampling_hz=500.0, n_channels=2, dtype="float32"))

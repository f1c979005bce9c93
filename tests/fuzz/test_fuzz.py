"""Readers on spoilt files: a value or one LeadlineError, whatever the bytes.

The corpus is made from seeds, the same every time; crashers that were found and mended are kept as files in
``fixtures/fuzz``. ``make fuzz`` goes on from here.
"""

import importlib
import json
import os
import pickle
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from tests.faults.killing import in_child
from tests.fuzz.judge import Judge, bound_memory
from tests.fuzz.mutate import mutate
from tests.fuzz.readers import READERS

from leadline.base.errors import LeadlineError

FIXTURES = Path(__file__).parents[2] / "fixtures" / "fuzz"
CASES = 75
SLOW = ("nwb", "tiff", "planes", "spikes-parquet")
CASES_SLOW = 30


@pytest.fixture(scope="module")
def libraries():
    """What readers import, imported once, before the children part."""
    for name in ("pandas", "pyarrow.parquet", "zarr", "nibabel", "nrrd", "tifffile", "pynwb", "scipy.ndimage",
                 "leadline.io._reduce_kernel", "leadline.io._samples_kernel", "leadline_napari.store"):  # fmt: skip
        importlib.import_module(name)


@pytest.mark.usefixtures("libraries")
@pytest.mark.parametrize("name", READERS)
def test_spoilt_files_are_a_value_or_an_error_in_words(name, tmp_path):
    """At least 2000 cases over all readers, in a child that may grow by a gigabyte."""

    def read():
        os.dup2(os.open(tmp_path / "said", os.O_WRONLY | os.O_CREAT), 1)
        judge = Judge(READERS[name])
        bound_memory()
        kept = [path.read_bytes() for path in sorted(FIXTURES.glob(f"{name}-*"))]
        cases = [mutate(judge.good[k % len(judge.good)], judge.good, np.random.default_rng([7, k]))
                 for k in range(CASES_SLOW if name in SLOW else CASES)]  # fmt: skip
        for data in (*kept, *cases):
            found = judge.look(data)
            if found:
                print(found.key, repr(data[:300]), found.text, flush=True)
        judge.close()

    code = in_child(read, silent=False)
    said = (tmp_path / "said").read_text()
    assert said == ""
    assert code == 0


def test_the_corpus_is_large_enough_and_the_same_every_time():
    assert sum(CASES_SLOW if name in SLOW else CASES for name in READERS) >= 2000
    good = [b'{"a": [1, 2.5, "x"]}', b"a,b\n1,2\n"]
    first, second = ([mutate(good[k % 2], good, np.random.default_rng([7, k])) for k in range(50)] for _ in range(2))
    assert first == second
    assert len(set(first)) > 45


JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=5), inner, max_size=4),
    max_leaves=12,
)
CELL = st.text(max_size=6) | st.integers().map(str) | st.floats().map(str)


@pytest.fixture(scope="module")
def judges():
    """Of every text reader, in this process."""
    made = {name: Judge(READERS[name]) for name in ("probe", "steps", "foreign-json", "zarr3-group", "spikes-csv",
                                                   "anchors", "structures", "points", "brain.toml")}  # fmt: skip
    yield made
    for judge in made.values():
        judge.close()


@settings(max_examples=120, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(content=JSON, at=st.integers(0, 200))
@pytest.mark.parametrize("name", ["probe", "steps", "foreign-json", "zarr3-group"])
def test_any_value_in_any_place_of_a_json_file(judges, name, content, at):
    """A good file with one value replaced by any other."""
    from tests.fuzz.mutate import _places

    whole = json.loads(judges[name].good[0])
    places = _places(whole)
    parent, key = places[at % len(places)]
    parent[key] = content
    found = judges[name].look(json.dumps(whole).encode())
    assert found is None, found.text


@settings(max_examples=80, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(row=st.integers(0, 5), column=st.integers(0, 8), cell=CELL)
@pytest.mark.parametrize("name", ["spikes-csv", "anchors", "structures", "points"])
def test_any_text_in_any_cell_of_a_table(judges, name, row, column, cell):
    lines = [line.split(",") for line in judges[name].good[0].decode().strip().split("\n")]
    line = lines[row % len(lines)]
    line[column % len(line)] = cell
    found = judges[name].look("\n".join(",".join(line) for line in lines).encode("utf-8", "surrogatepass"))
    assert found is None, found.text


@pytest.mark.parametrize("codecs", [
    {"filters": [{"id": "pickle", "protocol": 5}]},
    {"compressor": {"id": "pickle", "protocol": 5}},
    {"filters": [{"id": "delta", "dtype": "<u2"}, {"id": "pickle", "protocol": 5}]},
])  # fmt: skip
def test_a_zarr_array_that_wants_to_be_unpickled_is_refused_and_runs_nothing(tmp_path, codecs):
    import zarr

    from leadline.io.stacks import open_image

    class Bomb:
        def __reduce__(self):
            return Path.write_text, (tmp_path / "owned", "x")

    array = zarr.create_array(str(tmp_path / "a.zarr"), shape=(4, 4, 4), chunks=(4, 4, 4), dtype="u2", zarr_format=2)
    array[:] = 1
    meta = tmp_path / "a.zarr" / ".zarray"
    meta.write_text(json.dumps(json.loads(meta.read_text()) | {"filters": None, "compressor": None} | codecs))
    (tmp_path / "a.zarr" / "0.0.0").write_bytes(pickle.dumps(Bomb()))
    with pytest.raises(LeadlineError):
        np.asarray(open_image(tmp_path / "a.zarr").levels[0].data[0:1])
    assert not (tmp_path / "owned").exists()

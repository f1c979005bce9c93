"""The same inputs, settings and seed give the same bytes; and the same channels as they were when last looked at."""

from pathlib import Path

import pytest
from tests.end_to_end import golden

# Sizes of what is held at once, all smaller than by default, so that the small brain falls into many pieces.
SMALL_BLOCKS = {
    "leadline.io.reduce.BLOCK_BYTES": 1 << 18,
    "leadline.tracing.grid.SLAB_VOXELS": 40_000,
    "leadline.tracing.autofluorescence.SLAB": 8,
    "leadline.tracing.ridge.BLOCK": 48,
    "leadline.physiology.spectrum.GROUP": 10,
}


@pytest.fixture(scope="module")
def runs(tmp_path_factory):
    """One thread; and two threads, other chunks of the stack, other blocks everywhere."""
    plain, other = (tmp_path_factory.mktemp(name) / "brain" for name in ("plain", "other"))
    golden.write_inputs(plain)
    golden.write_inputs(other, chunk=(24, 40, 56))
    golden.run_fresh(plain)
    golden.run_fresh(other, threads=2, constants=SMALL_BLOCKS)
    return plain / "out", other / "out"


def content(path):
    """The bytes of a file; of an ITK transform its numbers, because HDF5 notes the time of writing."""
    if path.suffix != ".h5":
        return path.read_bytes()
    import SimpleITK as sitk

    whole = sitk.CompositeTransform(sitk.ReadTransform(str(path)))
    parts = [whole.GetNthTransform(k) for k in range(whole.GetNumberOfTransforms())]
    return [(part.GetParameters(), part.GetFixedParameters()) for part in parts]


def test_threads_and_chunks_do_not_change_a_byte(runs):
    plain, other = runs
    names = sorted(p.relative_to(plain) for p in plain.rglob("*") if p.is_file())
    assert names == sorted(p.relative_to(other) for p in other.rglob("*") if p.is_file())
    assert len(names) > 12
    # provenance.json holds the fingerprints of the inputs, which are stored in other chunks
    names.remove(Path("provenance.json"))
    assert [str(n) for n in names if content(plain / n) != content(other / n)] == []


def test_channels_are_where_they_were(runs):
    told = golden.difference(golden.read(golden.TABLE), golden.read(runs[0] / "channels.csv"))
    assert not told, f"channels moved:\n{told}\nIf that is meant: python -m tests.end_to_end.golden"


def test_a_difference_is_told_in_words():
    kept = golden.read(golden.TABLE)
    found = kept.copy()
    found.loc[2, "track_depth_um"] = str(float(kept["track_depth_um"][2]) + 30.0)
    found["region"] = "elsewhere"
    told = golden.difference(kept, found).splitlines()
    assert [line.split(":")[0] for line in told] == ["region", "track_depth_um"]
    assert f"first channel {kept['channel'][2]} of {kept['penetration'][2]}" in told[1]
    assert golden.difference(kept, kept.drop(columns="layer")) == "column layer is gone"
    assert golden.difference(kept, kept[:-1]) == f"{len(kept) - 1} channels instead of {len(kept)}"

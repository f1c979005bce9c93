"""The working copy of a brain's stack: when it is made, when not, and that stages read it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import zarr
from tests.good_brain import write_good_brain
from typer.testing import CliRunner

from leadline.base.errors import LeadlineError
from leadline.base.progress import Cancelled
from leadline.cli.main import app
from leadline.io.brainfile import read_brain
from leadline.pipeline import ingest as ingesting
from leadline.pipeline.bench import Bench
from leadline.pipeline.ingest import at_hand, ingest

FINE = "\n[settings.trace]\nresolution_um = 100.0\n\n[settings.register]\nresolution_um = 400.0\n"


@pytest.fixture
def brain(tmp_path, monkeypatch):
    """A small brain at 50 um whose stages are to read 100 and 200 um, in a world where little counts as small."""
    file = write_good_brain(tmp_path)
    file.write_text(file.read_text() + FINE)
    monkeypatch.setattr(ingesting, "LOOK_UM", 100.0)
    return read_brain(tmp_path)


def test_small_stacks_are_read_as_they_are(brain):
    done = ingest(Bench(brain))
    assert [one.made for one in done] == [False, False]
    assert not (brain.cache / "stack").exists()


def test_stages_find_the_copy_and_originals_stay_untouched(brain):
    before = {p: p.read_bytes() for p in brain.folder.glob("*.tif")}
    bench = Bench(brain)
    direct = bench.reduced(bench.background, 100.0)
    done = ingest(bench, on_need=False)
    assert [one.made for one in done] == [True, True]
    assert [level.voxel_um[0] for level in bench.background.levels] == [50, 100, 200]
    assert bench.background.fitting(100.0).chunk is not None
    through = bench.reduced(bench.background, 100.0)
    np.testing.assert_allclose(through.origin_um, direct.origin_um)
    assert np.abs(through.array() - direct.array()).max() <= 0.5
    assert {p: p.read_bytes() for p in brain.folder.glob("*.tif")} == before
    assert [one.made for one in ingest(bench, on_need=False)] == [False, False]


def test_large_stacks_are_brought_in_on_first_need(brain, monkeypatch):
    """Before registration begins, with no word from the user."""
    from leadline.pipeline import work
    from leadline.pipeline.run import run

    seen = []

    def look(bench, files):
        seen.extend(level.voxel_um[0] for level in bench.background.levels)
        raise Cancelled

    monkeypatch.setattr(work, "register", look)
    monkeypatch.setattr(ingesting, "SMALL_VOXELS", 1000.0)
    with pytest.raises(Cancelled):
        run(brain, until="register")
    assert seen == [50, 100, 200]


def test_a_stack_that_changed_makes_its_copy_worthless(brain):
    import tifffile

    ingest(Bench(brain), on_need=False)
    voxels = tifffile.imread(brain.stack.dye)
    size = {f"PhysicalSize{a}": 50.0 for a in "XYZ"} | {f"PhysicalSize{a}Unit": "µm" for a in "XYZ"}
    tifffile.imwrite(brain.stack.dye, voxels + 1, metadata={"axes": "ZYX"} | size)
    assert len(Bench(brain).dye.levels) == 1
    assert [one.made for one in ingest(Bench(brain), on_need=False)] == [False, True]
    assert len(Bench(brain).dye.levels) == 3


def test_a_multiscale_zarr_is_used_as_it_is_where_its_levels_fit(tmp_path):
    voxels = np.random.default_rng(0).integers(0, 999, (64, 64, 64)).astype(np.uint16)

    def stack(name: str, steps: tuple[int, ...], chunk: tuple[int, int, int]):
        from leadline.io.stacks import open_stack

        group = zarr.open_group(tmp_path / name, mode="w", zarr_format=3)
        datasets = []
        for k, step in enumerate(steps):
            group.create_array(
                str(k), data=voxels[::step, ::step, ::step], chunks=tuple(min(c, 64 // step) for c in chunk)
            )
            scale = [{"type": "scale", "scale": [5.0 * step] * 3}, {"type": "translation", "translation": [0.0] * 3}]
            datasets.append({"path": str(k), "coordinateTransformations": scale})
        axes = [{"name": n, "type": "space", "unit": "micrometer"} for n in "zyx"]
        group.attrs["ome"] = {"version": "0.5", "multiscales": [{"axes": axes, "datasets": datasets}]}
        return open_stack(tmp_path / name, code="PIR")

    cube = (16, 16, 16)
    several, one, planes = stack("a", (1, 2, 4), cube), stack("b", (1,), cube), stack("c", (1, 2, 4), (1, 64, 64))
    assert all(at_hand(several, um, 0.0) for um in (10.0, 25.0, 40.0))
    assert at_hand(one, 10.0, 0.0)
    assert not at_hand(one, 25.0, 0.0)  # 125 voxels would be read for one
    assert not at_hand(planes, 10.0, 0.0)  # whole planes cannot be read around a track
    assert at_hand(planes, 10.0)


def test_the_command_says_what_it_did(brain):
    runner = CliRunner()
    first = runner.invoke(app, ["ingest", str(brain.folder)])
    assert first.exit_code == 0
    assert "background: written; resolutions 50x50x50, 100x100x100, 200x200x200 um" in first.stdout
    assert "dye: up to date" in runner.invoke(app, ["ingest", str(brain.folder)]).stdout
    full = runner.invoke(app, ["ingest", str(brain.folder), "--keep-full", "--json"])
    assert '"made": true' in full.stdout
    assert Path(brain.cache / "stack" / "dye.ome.zarr" / "2").is_dir()
    bench = Bench(brain)
    np.testing.assert_array_equal(bench.dye.finest.array(), bench.dye.finest.data[:, :, :])
    assert bench.dye.finest.chunk is not None


def test_a_full_disk_is_refused_in_words(brain, monkeypatch):
    import shutil
    from collections import namedtuple

    usage = namedtuple("usage", "total used free")
    monkeypatch.setattr(shutil, "disk_usage", lambda place: usage(1, 1, 1000))
    with pytest.raises(LeadlineError, match="GB are free"):
        ingest(Bench(brain), on_need=False)

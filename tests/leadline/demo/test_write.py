"""The invented brain's files agree with its truth, whatever their format and orientation."""

from __future__ import annotations

import json
import tomllib
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
import pytest

from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT
from leadline.demo import formats
from leadline.demo.recipe import ATLAS_FORMATS, STACK_FORMATS, Recipe, small
from leadline.demo.sample import draw
from leadline.demo.warp import Frame
from leadline.demo.write import brain_toml, invent, write_brain
from leadline.io.atlases import read_atlas
from leadline.io.brainfile import read_brain
from leadline.io.stacks import open_stack
from leadline.model.frames import ALL_CODES, axes_matrix, from_pir

if TYPE_CHECKING:
    from pathlib import Path

# One bright, gapless track on a dull ground, so that a wrong axis or voxel size cannot go unseen.
PLAIN = small(
    Recipe(),
    voxel_um=(75.0, 75.0, 75.0),
    seconds=0.0,
    penetrations=1,
    gaps=0,
    vessels=0,
    bubbles=0,
    pools=False,
    n_points=300,
)


@pytest.fixture(scope="module")
def brain(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("brain") / "b"
    write_brain(folder, PLAIN)
    return folder


@pytest.fixture(scope="module")
def images() -> tuple[np.ndarray, np.ndarray]:
    """The two channels laid out as PIR: with cubic voxels they are the same for every code and format."""
    made = invent(PLAIN)
    return draw(PLAIN, made.chart, made.frame, made.penetrations)


@pytest.fixture
def drawn(monkeypatch: pytest.MonkeyPatch, images: tuple[np.ndarray, np.ndarray]) -> None:
    monkeypatch.setattr("leadline.demo.write.draw", lambda *_: images)


def _dye(folder: Path) -> tuple[object, np.ndarray]:
    """The dye stack as the readers give it, and the true places of the dye away from both ends."""
    source = read_brain(folder).stack
    volume = open_stack(source.dye, channel=source.dye_channel, voxel_um=source.voxel_um, code=source.code).finest
    tracks = pd.read_csv(folder / "truth/tracks.csv")
    end = tracks.loc[tracks["mark"] == "dye_end", "track_depth_um"].iloc[0]
    core = tracks[(tracks.track_depth_um > 300) & (tracks.track_depth_um < end - 200)]
    return volume, core[["s0_um", "s1_um", "s2_um"]].to_numpy()


def _lit(volume: object, points: np.ndarray) -> float:
    data = volume.array()
    index = np.rint(volume.index(points)).astype(int)
    return float(np.median(data[tuple(index.T)]) / np.median(data))


@pytest.mark.parametrize("kind", STACK_FORMATS)
@pytest.mark.usefixtures("drawn")
def test_dye_shines_where_the_truth_says_in_every_format(kind: str, tmp_path: Path) -> None:
    write_brain(tmp_path / "b", replace(PLAIN, stack_format=kind))
    volume, points = _dye(tmp_path / "b")
    assert len(points) > 50
    assert _lit(volume, points) > 5


@pytest.mark.parametrize("kind", ["ome-zarr-0.4", "ome-tiff"])
@pytest.mark.usefixtures("drawn")
def test_two_channels_in_one_file(kind: str, tmp_path: Path) -> None:
    write_brain(tmp_path / "b", replace(PLAIN, stack_format=kind, one_file=True))
    volume, points = _dye(tmp_path / "b")
    assert _lit(volume, points) > 5


@pytest.mark.parametrize("code", ALL_CODES)
def test_every_code_stores_a_point_where_its_voxel_goes(code: str) -> None:
    voxel = np.array([30.0, 20.0, 25.0])
    frame = Frame(code, (40, 50, 60), voxel)
    image = np.zeros(frame.pir_shape)
    image[7, 11, 13] = 1
    (place,) = np.argwhere(from_pir(image, code))
    q = np.array([[7, 11, 13]]) * (np.abs(axes_matrix(code)) @ voxel)
    np.testing.assert_allclose(frame.from_pir(q)[0], place * voxel)
    np.testing.assert_allclose(frame.to_pir(frame.from_pir(q)), q)


@pytest.mark.parametrize("code", ["RAS", "SLP"])
@pytest.mark.usefixtures("drawn")
def test_files_of_another_code_show_the_track(code: str, tmp_path: Path) -> None:
    write_brain(tmp_path / "b", replace(PLAIN, stack_code=code, stack_format="nrrd"))
    volume, points = _dye(tmp_path / "b")
    assert volume.code == code
    assert _lit(volume, points) > 5


@pytest.mark.parametrize("kind", ATLAS_FORMATS)
@pytest.mark.parametrize("code", ["PIR", "LSA"])
def test_atlas_reads_back_whole(kind: str, code: str, tmp_path: Path) -> None:
    from leadline.demo.anatomy import ids_at, make_atlas
    from leadline.demo.write import write_atlas

    recipe = replace(PLAIN, atlas_format=kind, atlas_code=code)
    made = make_atlas(recipe)
    write_atlas(tmp_path / "atlas", made, recipe)
    read = read_atlas(tmp_path / "atlas")
    assert (read.labels.array() == made.labels.array()).all()
    assert read.structures == made.structures
    centre = np.array([[60, 30, 45], [50, 40, 20], [70, 25, 66]])
    np.testing.assert_array_equal(read.label_at(centre * 100.0), ids_at(centre * 100.0))


def test_points_truth_is_the_true_map(brain: Path) -> None:
    made = invent(PLAIN)
    points = pd.read_csv(brain / "truth/points.csv")
    stack, atlas = points.iloc[:, :3].to_numpy(), points.iloc[:, 3:6].to_numpy()
    np.testing.assert_allclose(made.chart(made.frame.to_pir(stack)), atlas, atol=0.02)
    assert len(points) == PLAIN.n_points
    assert 0.2 < points.near_border.mean() < 0.8


def test_tracks_carry_their_marks_in_order(brain: Path) -> None:
    tracks = pd.read_csv(brain / "truth/tracks.csv")
    marks = tracks.dropna(subset="mark")
    assert set(marks["mark"]) == {"entry", "dye_end", "tip"}
    assert marks.loc[marks["mark"] == "entry", "track_depth_um"].item() == 0
    atlas = tracks[["ap_um", "dv_um", "ml_um"]].to_numpy()
    np.testing.assert_allclose(np.linalg.norm(np.diff(atlas, axis=0), axis=1), np.diff(tracks.track_depth_um), atol=0.5)


@pytest.mark.parametrize("kind", STACK_FORMATS)
def test_same_seed_same_bytes(kind: str, tmp_path: Path) -> None:
    image = np.random.default_rng(0).integers(0, 900, (9, 12, 11)).astype(np.uint16)
    for name in ("one", "two"):
        path = tmp_path / name / ("x" + formats.SUFFIX[kind])
        formats.write_image(path, [image], np.array([3.0, 2.0, 2.0]), "IAR", kind)
    one, two = (
        {p.relative_to(f): p.read_bytes() for p in f.rglob("*") if p.is_file()}
        for f in (tmp_path / "one", tmp_path / "two")
    )
    assert one == two


def test_same_seed_same_brain(brain: Path, tmp_path: Path) -> None:
    write_brain(tmp_path / "again", PLAIN)
    for file in brain.rglob("*"):
        if file.is_file():
            assert file.read_bytes() == (tmp_path / "again" / file.relative_to(brain)).read_bytes(), file


def test_another_seed_is_another_brain(brain: Path) -> None:
    other = invent(replace(PLAIN, seed=2))
    assert np.abs(other.chart.matrix - invent(PLAIN).chart.matrix).max() > 0.01


def test_written_once_only(brain: Path) -> None:
    before = (brain / "truth/points.csv").stat().st_mtime_ns
    write_brain(brain, PLAIN, SILENT)
    assert (brain / "truth/points.csv").stat().st_mtime_ns == before


def test_refuses_a_folder_of_something_else(tmp_path: Path) -> None:
    (tmp_path / "thesis.txt").write_text("mine")
    with pytest.raises(LeadlineError, match="not empty"):
        write_brain(tmp_path, PLAIN)
    assert [p.name for p in tmp_path.iterdir()] == ["thesis.txt"]


def test_brain_file_never_names_the_truth(brain: Path) -> None:
    text = (brain / "brain.toml").read_text()
    assert "truth" not in text
    assert tomllib.loads(text) == tomllib.loads(brain_toml(invent(PLAIN), {}))


def test_probe_files_pass_the_published_check(tmp_path: Path) -> None:
    testing = pytest.importorskip("probeinterface.testing")
    from leadline.demo.probes import as_json, banked, four_shanks, single_shank

    for design in (single_shank(), four_shanks(), banked()):
        for probe in as_json(design)["probes"]:
            testing.validate_probe_dict(json.loads(json.dumps(probe)))
        assert len(design.probe.recorded.contact_id) == 384


def test_formats_that_carry_nothing_are_told_in_the_brain_file() -> None:
    for kind in STACK_FORMATS:
        stack = tomllib.loads(brain_toml(invent(replace(PLAIN, stack_format=kind)), {}))["stack"]
        assert ("voxel_um" in stack) == (kind not in formats.CARRIES_VOXEL)
        assert ("orientation" in stack) == (kind not in formats.CARRIES_CODE)


def test_another_recipe_replaces_all_of_the_former(brain: Path, tmp_path: Path) -> None:
    folder = tmp_path / "b"
    write_brain(folder, replace(PLAIN, stack_format="tiff-folder"))
    shorter = replace(PLAIN, stack_format="tiff-folder", voxel_um=(200.0, 160.0, 160.0))
    write_brain(folder, shorter)
    assert len(list((folder / "stack/dye").iterdir())) == invent(shorter).frame.shape[0]
    assert json.loads((folder / "truth/recipe.json").read_text())["voxel_um"] == [200.0, 160.0, 160.0]

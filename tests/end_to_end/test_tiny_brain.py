"""The whole way on a tiny brain: results, resuming, anchors, points, and what is said of broken inputs."""

import json
import shutil
import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from tests.end_to_end.broken_inputs import BROKEN_INPUTS, content
from tests.end_to_end.broken_inputs import main as make_fixtures
from tests.good_brain import write_good_brain
from tests.leadline.io.broken_cases import BROKEN

from leadline.cli.main import main
from leadline.io.atlases import read_atlas
from leadline.model.channels import BASES, CHANNEL_COLUMNS, STEREO_COLUMNS
from leadline.pipeline.laminar import COLUMNS as LAMINAR_COLUMNS

FIXTURES = Path(__file__).parents[2] / "fixtures" / "broken"


def leadline(capsys, *words):
    """Run the command line in this process: (exit code, standard output, standard error)."""
    old = sys.argv
    sys.argv = ["leadline", *map(str, words)]
    try:
        main()
        code = 0
    except SystemExit as stop:
        code = stop.code or 0
    finally:
        sys.argv = old
    told = capsys.readouterr()
    return code, told.out, told.err


def state(folder):
    """Content and time of every file."""
    return {p.relative_to(folder): (p.stat().st_mtime_ns, p.read_bytes()) for p in folder.rglob("*") if p.is_file()}


@pytest.fixture(scope="module")
def done(tmp_path_factory):
    folder = tmp_path_factory.mktemp("tiny")
    write_good_brain(folder)
    from leadline.io.brainfile import read_brain
    from leadline.pipeline.run import run

    run(read_brain(folder))
    return folder


@pytest.fixture
def brain(done, tmp_path):
    """A finished brain to do things to."""
    folder = tmp_path / "brain"
    shutil.copytree(done, folder)
    return folder


def with_anchors(folder, *pairs):
    """Write brain.toml anew, with these anchors (tip distance, track depth) and no others."""
    text = (folder / "brain.toml").read_text().split("[[anchor]]")[0]
    rows = [f'[[anchor]]\npenetration = "A"\ntip_distance_um = {t}\ntrack_depth_um = {d}\n' for t, d in pairs]
    (folder / "brain.toml").write_text(text + "\n".join(rows))


def channels(folder):
    return pd.read_csv(folder / "out" / "channels.csv", keep_default_na=False)


def test_every_promised_file_is_there(done):
    for name in (
        "channels.csv", "channels.parquet", "posterior.parquet", "tracks.csv", "profiles/A.parquet", "profiles/A.png",
        "anchors.csv", "suggestions.csv", "provenance.json", "registration/stack_to_atlas.h5",
        "registration/atlas_to_stack.h5", "registration/qc.json", "registration/qc.png", "registration/README",
    ):  # fmt: skip
        assert (done / "out" / name).stat().st_size > 0, name
    assert not list(done.rglob(".part-*"))


def test_the_channel_table_keeps_the_contract(done):
    table, atlas = channels(done), read_atlas(done / "atlas")
    assert tuple(table.columns) == (*CHANNEL_COLUMNS, *STEREO_COLUMNS, *LAMINAR_COLUMNS)
    assert len(table) == 32
    assert set(table["basis"]) <= set(BASES)
    assert table["p_region"].between(0, 1).all()
    assert (table["p_coarse"] >= table["p_region"] - 1e-9).all()
    at = table[["ap_um", "dv_um", "ml_um"]].to_numpy(float)
    # a border or two lie between the middle of the draws and the likeliest structure, seldom
    assert (table["region_id"] == atlas.label_at(at)).mean() > 0.7
    assert table["region"].tolist() == [atlas.structures[i].acronym for i in table["region_id"]]
    assert (np.diff(table.sort_values("tip_distance_um")["track_depth_um"]) <= 0).all()
    same = pd.read_parquet(done / "out" / "channels.parquet")
    assert same["track_depth_um"].tolist() == table["track_depth_um"].tolist()


def test_probabilities_agree_between_the_two_tables(done):
    table, posterior = channels(done), pd.read_parquet(done / "out" / "posterior.parquet")
    assert posterior.groupby("channel")["probability"].sum().between(0.97, 1.0001).all()
    named = posterior.merge(table, on=["penetration", "channel", "region_id"], how="inner")
    assert np.allclose(named["probability"], named["p_region"], atol=1e-3)
    likeliest = posterior.groupby("channel")["probability"].max()
    assert np.allclose(table.set_index("channel")["p_region"], likeliest.sort_index(), atol=1e-3)


def test_a_second_run_changes_no_file_and_is_quick(brain, capsys):
    before = state(brain)
    start = time.process_time()
    assert leadline(capsys, "run", brain)[0] == 0
    assert time.process_time() - start < 3.0
    assert state(brain) == before


def test_a_brain_that_has_moved_is_not_run_again(brain, capsys):
    code, out, _ = leadline(capsys, "run", brain, "--json")
    assert code == 0
    assert json.loads(out)["done"] == []


def test_a_lost_file_is_made_again_as_it_was(brain, capsys):
    path = brain / "out" / "channels.csv"
    before = path.read_bytes()
    path.unlink()
    _, out, _ = leadline(capsys, "run", brain, "--json")
    assert json.loads(out)["done"] == ["locate"]
    assert path.read_bytes() == before


def test_by_hand_alone_anchors_draw_the_contract_map(brain, capsys):
    with_anchors(brain, *((700.0, 1800.0), (1500.0, 1100.0)))
    code, out, err = leadline(capsys, "run", brain, "--no-physiology", "--json")
    assert code == 0, err
    assert json.loads(out)["done"] == ["anchor", "locate"]
    table = channels(brain)
    tip, depth = table["tip_distance_um"].to_numpy(float), table["track_depth_um"].to_numpy(float)
    expected = np.interp(np.clip(tip, 700, 1500), [700, 1500], [1800, 1100]) - (tip - np.clip(tip, 700, 1500))
    assert depth == pytest.approx(expected, abs=0.02)
    assert table["basis"].tolist() == ["between" if 700 <= t <= 1500 else "beyond" for t in tip]
    assert len(pd.read_csv(brain / "out" / "anchors.csv")) == 2


def test_an_anchor_that_left_brain_toml_is_gone(brain, capsys):
    with_anchors(brain, (700.0, 1800.0))
    leadline(capsys, "anchor", brain)
    assert len(pd.read_csv(brain / "out" / "anchors.csv")) == 1
    with_anchors(brain)
    leadline(capsys, "anchor", brain)
    assert len(pd.read_csv(brain / "out" / "anchors.csv")) == 0


def test_crossing_anchors_name_both_and_change_nothing(brain, capsys):
    with_anchors(brain, *((700.0, 1100.0), (1500.0, 1800.0)))
    before = state(brain)
    code, _, err = leadline(capsys, "run", brain)
    assert code == 2
    assert "700" in err
    assert "1500" in err
    assert state(brain) == before


def test_points_go_to_the_atlas_and_back(brain, tmp_path, capsys):
    rng = np.random.default_rng(0)
    points = pd.DataFrame(rng.uniform(800, 1800, (40, 3)), columns=["s0_um", "s1_um", "s2_um"]).assign(cell=range(40))
    points.to_csv(tmp_path / "cells.csv", index=False)
    assert leadline(capsys, "map", brain, tmp_path / "cells.csv", "--to", "atlas", "-o", tmp_path / "there.csv")[0] == 0
    there = pd.read_csv(tmp_path / "there.csv")
    assert list(there.columns) == ["s0_um", "s1_um", "s2_um", "cell", "ap_um", "dv_um", "ml_um", "region_id", "region"]
    assert there["cell"].tolist() == list(range(40))
    atlas = read_atlas(brain / "atlas")
    assert there["region_id"].tolist() == atlas.label_at(there[["ap_um", "dv_um", "ml_um"]].to_numpy()).tolist()
    there.drop(columns=["s0_um", "s1_um", "s2_um"]).to_csv(tmp_path / "there.csv", index=False)
    code, out, _ = leadline(capsys, "map", brain, tmp_path / "there.csv", "--to", "stack")
    assert code == 0
    (tmp_path / "back.csv").write_text(out)
    back = pd.read_csv(tmp_path / "back.csv")[["s0_um", "s1_um", "s2_um"]].to_numpy()
    assert np.abs(back - points[["s0_um", "s1_um", "s2_um"]].to_numpy()).max() < 5.0


def test_the_transform_files_say_the_same_as_map(done):
    # Outside judge: SimpleITK reads the files and carries points itself.
    import SimpleITK as sitk

    from leadline.io.brainfile import read_brain
    from leadline.pipeline.products import RegistrationFiles

    path = str(done / "out" / "registration" / "stack_to_atlas.h5")
    theirs, ours = sitk.ReadTransform(path), RegistrationFiles(read_brain(done)).read().stack_to_atlas
    points = np.random.default_rng(1).uniform(300, 2200, (50, 3))
    assert np.abs(np.array([theirs.TransformPoint(p.tolist()) for p in points]) - ours(points)).max() < 1.0


def test_two_processes_do_not_work_on_one_brain(brain, capsys):
    import fcntl

    (brain / "out" / "channels.csv").unlink()
    with (brain / "brain.toml").open("rb") as handle:
        fcntl.flock(handle, fcntl.LOCK_EX)
        code, _, err = leadline(capsys, "run", brain)
    assert code == 2
    assert "another Leadline process" in err


@pytest.mark.parametrize("case", [*BROKEN, *BROKEN_INPUTS], ids=lambda case: case.name)
def test_a_broken_input_is_exit_2_with_one_message_and_an_untouched_folder(tmp_path, capsys, case):
    write_good_brain(tmp_path)
    case.make(tmp_path)
    before = state(tmp_path)
    code, _, err = leadline(capsys, "run", tmp_path)
    assert code == 2, err
    assert "Traceback" not in err
    for word in case.words:
        assert word.casefold() in err.casefold()
    assert state(tmp_path) == before


def test_the_broken_fixtures_are_those_that_are_tested(tmp_path):
    make_fixtures(tmp_path)
    made, kept = content(tmp_path), content(FIXTURES)
    assert set(made) == set(kept) - {"README.md"}
    dated = (".nrrd", ".tif")  # their writers note the time
    assert [n for n in made if made[n] != kept[n] and not n.endswith(dated)] == []
    assert len(list(tmp_path.iterdir())) >= 40

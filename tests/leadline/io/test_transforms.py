"""Point transforms in plain arrays: what is written is read back to the last bit, and damage is told."""

import numpy as np
import pytest

from leadline.base.errors import LeadlineError
from leadline.io.transforms import read_transforms, write_transforms
from leadline.model.transform import Affine, Field, PointTransform


def some_transform(seed):
    rng = np.random.default_rng(seed)
    field = Field(rng.normal(0, 60, (4, 5, 6, 3)), np.array([200.0, 150.0, 120.0]), np.array([-300.0, 100.0, 50.0]))
    return PointTransform(Affine(np.eye(3), rng.normal(size=3)), field, Affine(rng.normal(size=(3, 3)), np.ones(3)))


@pytest.fixture
def path(tmp_path):
    write_transforms(
        tmp_path / "t.npz", {"there": some_transform(1), "back": PointTransform(Affine(np.eye(3), np.ones(3)))}
    )
    return tmp_path / "t.npz"


def test_what_is_written_is_read_back_to_the_last_bit(path):
    there, back = read_transforms(path, ("there", "back"))
    points = np.random.default_rng(4).uniform(-800, 2200, (500, 3))
    assert np.array_equal(there(points), some_transform(1)(points))
    assert back.field is None
    assert np.array_equal(back(points), points + 1)


def test_the_same_transforms_give_the_same_bytes(path, tmp_path):
    write_transforms(
        tmp_path / "u.npz", {"there": some_transform(1), "back": PointTransform(Affine(np.eye(3), np.ones(3)))}
    )
    assert (tmp_path / "u.npz").read_bytes() == path.read_bytes()


def test_a_missing_file_is_said(tmp_path):
    with pytest.raises(LeadlineError, match="no such file"):
        read_transforms(tmp_path / "none.npz", ("there",))


@pytest.mark.parametrize("at", [0, 30, 100, 700, -30])
def test_a_bit_that_has_turned_is_noticed(path, at):
    data = bytearray(path.read_bytes())
    data[at] ^= 4
    path.write_bytes(data)
    with pytest.raises(LeadlineError, match=r"holds no transforms.*register"):
        read_transforms(path, ("there", "back"))


@pytest.mark.parametrize("array", [np.zeros((4, 3)), np.full((3, 4), np.nan), np.array(["x"]), np.zeros((3, 4), int)])
def test_arrays_that_are_no_transform_are_refused(tmp_path, array):
    np.savez(tmp_path / "t.npz", there_first=array, there_last=np.zeros((3, 4)))
    with pytest.raises(LeadlineError, match="holds no transforms"):
        read_transforms(tmp_path / "t.npz", ("there",))

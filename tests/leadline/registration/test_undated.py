"""The same transform gives the same bytes, whenever it is written, and HDF5 still finds its checksums right."""

import time

import h5py
import numpy as np
import pytest

from leadline.model.transform import Affine, Field, PointTransform
from leadline.registration import _sitk
from leadline.registration._undated import lookup3, undated


def test_the_checksum_is_that_of_its_author():
    # Jenkins 2006, lookup3.c, driver5: hashlittle("Four score and seven years ago", 30, 0); from memory
    assert lookup3(b"Four score and seven years ago") == 0x17770551
    assert lookup3(b"") == 0xDEADBEEF


@pytest.fixture
def transform():
    affine = Affine(np.eye(3), np.ones(3))
    return PointTransform(affine, Field(np.ones((4, 4, 4, 3)), np.full(3, 100.0), np.zeros(3)), affine)


def test_a_transform_written_a_second_later_has_the_same_bytes(tmp_path, transform):
    _sitk.write_point_transform(tmp_path / "a.h5", transform)
    time.sleep(1.1)
    _sitk.write_point_transform(tmp_path / "b.h5", transform)
    assert (tmp_path / "a.h5").read_bytes() == (tmp_path / "b.h5").read_bytes()


def test_what_has_lost_its_dates_is_read_by_others(tmp_path, transform):
    import SimpleITK as sitk

    _sitk.write_point_transform(tmp_path / "a.h5", transform)
    carried = sitk.ReadTransform(str(tmp_path / "a.h5")).TransformPoint((120.0, 110.0, 130.0))
    assert carried == pytest.approx(transform(np.array([[120.0, 110.0, 130.0]]))[0], abs=1e-6)
    with h5py.File(tmp_path / "a.h5") as file:
        names = []
        file.visit(names.append)
        assert len(names) > 10
        assert h5py.h5g.get_objinfo(file["TransformGroup"].id).mtime == 0


def test_bytes_that_only_look_like_a_header_are_left_alone():
    for content in (b"", b"OHDR", b"OHDR\x02\x20" + bytes(60), b"x" * 50 + b"OHDR\x01" + bytes(20)):
        assert undated(content) == content

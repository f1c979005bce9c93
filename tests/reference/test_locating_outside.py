"""Regions of points against scipy and SimpleITK, oblique tracks against trigonometry, layer borders against theirs."""

import numpy as np
import pytest
import SimpleITK as sitk
from scipy.integrate import quad
from scipy.ndimage import map_coordinates

from leadline.atlas.laminar import LAYER_SETS
from leadline.locating.assign import locate
from leadline.model.atlas import Atlas, Structure, Structures
from leadline.model.posterior import DepthPosterior
from leadline.model.track import Track, arc_length
from leadline.model.volume import Volume

VOXEL_UM = np.array([50.0, 25.0, 40.0])
RNG = np.random.default_rng(12)


def atlas_of(labels):
    rows = tuple(Structure(int(i), f"s{i}", f"structure {i}", None) for i in np.unique(labels) if i)
    grid = Volume(labels.astype(np.uint32), VOXEL_UM, "PIR")
    return Atlas("reference", grid, grid, Structures(rows))


def test_labels_at_points_are_the_nearest_voxels_of_scipy_and_simpleitk():
    """scipy.ndimage.map_coordinates of order 0 and SimpleITK's nearest-neighbour resampler; exact."""
    labels = RNG.integers(0, 9, (20, 24, 18))
    points = RNG.uniform(-60, (np.array(labels.shape) - 0.4) * VOXEL_UM, (4000, 3))
    index = points / VOXEL_UM
    points = points[(np.abs(index % 1 - 0.5) > 1e-6).all(axis=1)]
    found = atlas_of(labels).label_at(points)
    assert found.tolist() == map_coordinates(labels, (points / VOXEL_UM).T, order=0, mode="grid-constant").tolist()
    image = sitk.GetImageFromArray(labels.astype(np.uint16).T)  # SimpleITK's arrays run backwards
    image.SetSpacing(VOXEL_UM.tolist())
    inside = (np.rint(points / VOXEL_UM) >= 0).all(axis=1) & (np.rint(points / VOXEL_UM) < labels.shape).all(axis=1)
    theirs = [image[image.TransformPhysicalPointToIndex(p.tolist())] for p in points[inside][:500]]
    assert found[inside][:500].tolist() == theirs


def test_depth_is_the_arc_length_that_quadrature_gives():
    """A helix of growing radius; scipy.integrate.quad of its speed; 1e-4 of the length."""
    t = np.linspace(0, 6, 4000)
    points = np.column_stack([(200 + 50 * t) * np.cos(t), 400 * t, (200 + 50 * t) * np.sin(t)])
    length, _ = quad(lambda s: np.sqrt(50**2 + (200 + 50 * s) ** 2 + 400**2), 0, 6)
    assert arc_length(points)[-1] == pytest.approx(length, rel=1e-4)


@pytest.mark.parametrize("tilt_deg", [0.0, 20.0, 40.0])
def test_a_layer_crossed_at_an_angle_is_longer_by_its_cosine(tilt_deg):
    """A flat layer 500 um thick: along the track it measures 500 um / cos(tilt); within one voxel along the track."""
    labels = np.full((60, 160, 60), 1)
    labels[:, 40:60] = 2
    tilt = np.deg2rad(tilt_deg)
    depth = np.linspace(0, 3500, 400)
    points = np.column_stack([400 + depth * np.sin(tilt), depth * np.cos(tilt), np.full(400, 1000.0)])
    track = Track("A", 0, points, points, np.full(400, 20.0), 10.0, 30.0)
    tip = np.arange(0.0, 3400.0, 5.0)
    draws = DepthPosterior("A", 0, tip, np.tile(3500.0 - tip, (2, 1)), 0.0)
    found = locate(tip, track, draws, atlas_of(labels), [], registration_error_um=0.0)
    seen = found.track_depth_um[found.region_id == 2]
    assert np.ptp(seen) == pytest.approx(500 / np.cos(tilt), abs=25 / np.cos(tilt))


def test_layer_fractions_are_the_published_borders():
    """neuron-morphology 1.2.2, DEFAULT_MOUSE_ME_MET_REFERENCE_LAYER_DEPTHS; Lefort et al. 2009, Neuron 61, 301 (from
    memory). Borders in um; to four digits."""
    visual = np.array([115.1112491335, 333.4658190171, 453.6227158132, 687.6482650269, 883.1308910545, 922.5861720311])
    barrel = np.array([128.0, 269.0, 418.0, 588.0, 708.0, 890.0, 1154.0])
    for name, borders in (("mouse visual cortex", visual), ("mouse barrel cortex", barrel)):
        ours = [border for _, border in LAYER_SETS[name]]
        assert ours == pytest.approx((borders / borders[-1]).tolist(), abs=6e-5)

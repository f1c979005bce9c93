"""Centre lines against curves with closed forms: an arc, a helix and a uniform cubic B-spline."""

from __future__ import annotations

import numpy as np
import pytest

from leadline.model.track import arc_length
from leadline.tracing import centre, path

SIGMA_UM = 30.0


def arc(s):
    """Circle of radius 9000 um by arc length: x = R (1 - cos s/R), y = R sin s/R."""
    return np.stack([9000 * (1 - np.cos(s / 9000)), 9000 * np.sin(s / 9000), np.zeros_like(s)], axis=-1)


def helix(s):
    """Helix of radius 200 um and pitch 2 pi 1500 um by arc length: its speed is sqrt(a^2 + b^2)."""
    t = s / np.hypot(200.0, 1500.0)
    return np.stack([200 * np.cos(t), 1500 * t, 200 * np.sin(t)], axis=-1)


def spline(s):
    """Uniform cubic B-spline by its basis polynomials (de Boor 1978, A Practical Guide to Splines, ch. IX)."""
    control = np.array([[k * 1200.0, 90.0 * (-1) ** (k // 2), 60.0 * np.sin(k)] for k in range(-1, 7)])
    u = np.clip(s / 1200.0, 0, 4.999)
    k, t = u.astype(int), (u % 1)[..., None]
    basis = [(1 - t) ** 3, 3 * t**3 - 6 * t**2 + 4, -3 * t**3 + 3 * t**2 + 3 * t + 1, t**3]
    return sum(b / 6 * control[k + j] for j, b in enumerate(basis))


@pytest.mark.parametrize("curve", [arc, helix, spline])
def test_a_blurred_curve_is_followed(curve):
    """From a start 30 um off, the centre line lies within 3 um of the closed form everywhere inside: a tenth of the
    dye's width."""
    truth = curve(np.arange(0, 3600, 2.0))
    rng = np.random.default_rng(1)
    from scipy.spatial import cKDTree

    tree = cKDTree(truth)

    def dye(points):
        return 12 * np.exp(-(tree.query(points)[0] ** 2) / (2 * SIGMA_UM**2)) + rng.normal(0, 1, len(points))

    line = path.resampled(curve(np.arange(200, 3400, 100.0)) + np.array([18.0, 0.0, -24.0]), centre.STATION_UM)
    for _ in range(3):
        stations = centre.look(line, dye, 20.0)
        fitted = centre.fit_gaussians(stations, voxel_um=20.0)
        line, _ = centre.join(stations, fitted, np.ones(len(line), bool))
    assert tree.query(line)[0].max() < 3.0


@pytest.mark.parametrize(("curve", "length"), [(arc, 3000.0), (helix, 3000.0)])
def test_arc_length_of_closed_forms(curve, length):
    assert arc_length(curve(np.arange(0, length + 1, 5.0)))[-1] == pytest.approx(length, rel=1e-5)


def test_a_rough_line_bends_to_an_arc():
    """Points on an arc with directions along it: the cubic lies within 20 um, half of the last tolerance."""
    from leadline.tracing.ridge import Ridges

    s = np.arange(0, 3000, 15.0)
    points = arc(s)
    axes = np.gradient(points, axis=0)
    axes /= np.linalg.norm(axes, axis=1)[:, None]
    ridges = Ridges(points, axes, np.ones(len(s)))
    way = points[-1] - points[0]
    line = path.bend(
        points[100], way / np.linalg.norm(way), np.array([9.0, -1000.0, 1000.0]), ridges, np.ones(200, bool)
    )
    gap = np.abs(np.linalg.norm(line - [9000.0, 0, 0], axis=1) - 9000)
    assert gap.max() < 20.0
    assert arc_length(line)[-1] > 2900

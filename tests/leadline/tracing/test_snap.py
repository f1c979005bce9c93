import numpy as np

from leadline.model.volume import Volume
from leadline.tracing.snap import snapped


def dyed(curve_um, *, gap_um=None, seed=1):
    """A volume of 10 um voxels with a dye line of 30 um radius along a curve, and noise."""
    at = np.stack(np.meshgrid(*(np.arange(n) * 10.0 for n in (60, 200, 60)), indexing="ij"), -1)
    rng = np.random.default_rng(seed)
    centre = np.stack([np.interp(at[..., 1], curve_um[:, 1], curve_um[:, k]) for k in (0, 2)], axis=-1)
    off = np.linalg.norm(at[..., [0, 2]] - centre, axis=-1)
    line = 400.0 * np.exp(-0.5 * (off / 30.0) ** 2)
    if gap_um is not None:
        line[:, (np.arange(200) * 10.0 > gap_um[0]) & (np.arange(200) * 10.0 < gap_um[1])] = 0
    return Volume((100 + line + rng.normal(0, 15, off.shape)).astype(np.float32), np.full(3, 10.0), "PIR")


def curve():
    y = np.linspace(0, 1990, 200)
    return np.column_stack([300 + 60 * np.sin(y / 900), y, 290 + 0.03 * y])


def test_points_set_beside_the_dye_come_to_its_centre():
    true = curve()
    rows = np.array([20, 60, 100, 140, 180])
    hand = true[rows] + np.array([[30.0, 0, -25], [-35, 0, 20], [40, 0, 10], [-20, 0, -30], [25, 0, 25]])
    found = snapped(hand, dyed(true))
    off = [np.linalg.norm(true - p, axis=1).min() for p in found]
    assert max(off) < 12.0
    assert np.abs(found[:, 1] - hand[:, 1]).max() < 15.0


def test_where_no_dye_stands_out_a_point_stays():
    true = curve()
    rows = np.array([20, 100, 180])
    hand = true[rows] + np.array([[25.0, 0, 0], [0, 0, 25.0], [25.0, 0, 0]])
    found = snapped(hand, dyed(true, gap_um=(600, 1400)))
    assert np.linalg.norm(found[1] - hand[1]) < 3.0
    assert np.linalg.norm(found[0] - true[20]) < 12.0


def test_in_mere_noise_every_point_stays():
    hand = curve()[[20, 100, 180]]
    volume = Volume(np.random.default_rng(2).normal(100, 10, (60, 200, 60)).astype(np.float32), np.full(3, 10.0), "PIR")
    assert np.abs(snapped(hand, volume) - hand).max() < 5.0

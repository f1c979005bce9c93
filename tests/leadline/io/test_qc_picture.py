"""The picture of a registration: outlines lie where the registration puts the atlas."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.image import imread

from leadline.io.qc_picture import draw_qc
from leadline.model.atlas import Atlas, Structure, Structures
from leadline.model.frames import from_pir
from leadline.model.transform import Affine, PointTransform, Registration
from leadline.model.volume import Volume
from leadline.registration.grids import pir_to_stack


def drawn(path: Path, code: str, *, shift_um: float = 0.0) -> np.ndarray:
    """A ball in the atlas and the same ball in the sample, stored as ``code``; returns the picture's pixels."""
    at = np.indices((40, 36, 38)) - np.array([19.5, 17.5, 18.5])[:, None, None, None]
    ball = np.sqrt((at**2).sum(axis=0)) < 14
    labels = np.where(ball, np.where(at[1] < 0, 3, 2**32 - 1), 0).astype(np.uint32)
    atlas = Atlas(
        "invented",
        Volume(labels, np.full(3, 100.0), "PIR"),
        Volume(ball.astype(np.float32), np.full(3, 100.0), "PIR"),
        Structures((Structure(3, "up", "upper", None), Structure(2**32 - 1, "down", "lower", None))),
    )
    sample = Volume(np.ascontiguousarray(from_pir(ball * 500.0, code)), np.full(3, 100.0), code)
    there = pir_to_stack(sample).after(Affine(np.eye(3), np.array([0.0, shift_um, 0.0])))
    registration = Registration(
        PointTransform(last=there.inverse()), PointTransform(last=there), 25.0, {"mask_dice": 0.99}
    )
    draw_qc(path, sample, atlas, registration)
    return np.asarray(imread(path))[..., :3]


def orange(pixels: np.ndarray) -> np.ndarray:
    return (pixels[..., 0] > 0.7) & (pixels[..., 2] < 0.25) & (pixels[..., 1] > 0.4)


def test_the_picture_is_written_the_same_every_time_and_whole(tmp_path: Path) -> None:
    drawn(tmp_path / "a.png", "PIR")
    drawn(tmp_path / "b.png", "PIR")
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.png", "b.png"]


def test_the_outlines_sit_on_the_sample_in_any_orientation_and_show_a_shift(tmp_path: Path) -> None:
    """Tissue outside the outline is what the eye looks for: none where all is right, much after a shift."""
    right, turned, shifted = (
        drawn(tmp_path / f"{k}.png", code, shift_um=shift)
        for k, (code, shift) in enumerate((("PIR", 0.0), ("LAS", 0.0), ("PIR", 500.0)))
    )
    assert orange(right).sum() > 1000
    assert np.abs(right - turned).mean() < 1e-3
    assert np.abs(right - shifted).mean() > 0.01

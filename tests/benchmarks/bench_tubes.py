"""The tube filter against scikit-image's, on blocks of the sizes that tracing cuts a stack into."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from tests.benchmarks.frame import Row, best, in_child, timed

TUBE_SIDES = (80, 96, 128)
SCALES_VOX = (1.5, 2.5)


def rows() -> Iterator[Row]:
    """The filter on blocks of three sizes."""
    for side in TUBE_SIDES:
        a = in_child(tubes, side=side).answer
        yield Row(
            "tube filter", round(side**3 / 1e6, 3), "Mvox", a["ours_s"], a["theirs_s"], bar=40, at_least=True,
            reference="skimage.filters.sato", holds=a["agree"] > 0.95, note=f"{a['agree']:.3f} of the points agree",
        )  # fmt: skip


def tubes(side: int) -> dict[str, float]:
    """Ridge points and Sato's answer on a block of noise with a bent tube; share of points where that is high."""
    from scipy.ndimage import gaussian_filter, map_coordinates
    from skimage.filters import sato

    from leadline.model.volume import Volume
    from leadline.tracing.ridge import find_ridges

    image = np.random.default_rng(5).normal(0, 1, (side,) * 3).astype(np.float32)
    t = np.linspace(0.1, 0.9, 40 * side)
    line = np.stack([t, 0.4 + (t - 0.5) ** 2, 0.3 * t + 0.3], axis=-1) * side
    ink = np.zeros_like(image)
    np.add.at(ink, tuple(line.astype(int).T), 1.0)
    ink = gaussian_filter(ink, 1.6)
    image += 15 * ink / ink.max()
    volume = Volume(image, np.full(3, 20.0), "PIR")
    ours = lambda: find_ridges(volume, np.ones(image.shape, bool), tuple(s * 20.0 for s in SCALES_VOX), 1.0)  # noqa: E731
    ours()
    rounds = 20
    ours_s = best(lambda: [ours() for _ in range(rounds)]) / rounds
    theirs_s, answer = timed(lambda: sato(image, sigmas=SCALES_VOX, black_ridges=False))
    at = map_coordinates(answer, ours().points_um.T / 20.0, order=1)
    return {"ours_s": ours_s, "theirs_s": theirs_s, "agree": float((at > np.quantile(answer, 0.97)).mean())}

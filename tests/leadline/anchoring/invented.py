"""A short invented track with a plain truth, cheap enough for unit tests."""

import numpy as np

from leadline.anchoring.evidence import ShankEvidence
from leadline.model.atlas import Structure, Structures
from leadline.model.profile import Profile

STRUCTURES = Structures(
    (
        Structure(1, "CX", "cortex", None),
        Structure(2, "P1", "area P, layer 1", 1, layer="1"),
        Structure(3, "P23", "area P, layer 2/3", 1, layer="2/3"),
        Structure(4, "P5", "area P, layer 5", 1, layer="5"),
        Structure(5, "wt", "pale sheet", None, tissue="white"),
        Structure(6, "Bq", "body q", None),
        Structure(7, "Br", "body r", None),
        Structure(8, "Bs", "body s", None),
    )
)
BORDERS = np.array([0.0, 130.0, 420.0, 850.0, 1030.0, 1450.0, 1900.0])
IDS = np.array([0, 2, 3, 4, 5, 6, 7, 8])
DEPTH = np.arange(-1500.0, 4000.0, 5.0)
#                                out    P1   P23    P5    wt    Bq    Br    Bs
MEANS = {
    "gamma_power_db": np.array([-1.8, -0.8, 0.6, 0.3, -0.8, 0.1, 0.7, -0.3]),
    "delta_power_db": np.array([-1.2, -0.2, 0.3, 1.0, 0.0, -0.5, 0.4, 1.0]),
    "high_frequency_power_db": np.array([-1.5, -0.9, 0.1, 1.1, -0.9, 0.4, -0.3, 0.6]),
    "unit_density_per_100um": np.array([-1.4, -1.1, 0.2, 1.0, -1.3, 0.6, -0.2, 0.9]),
    "spike_rate_hz": np.array([-1.3, -1.0, -0.4, 1.0, -1.0, 0.9, 0.0, -0.6]),
}
TIP = 175.0 + 20.0 * np.arange(100)


def label(depth_um):
    """Structure at a depth."""
    return IDS[np.searchsorted(BORDERS, depth_um, side="right")]


def truth(tip_um, shift_um=130.0, stretch=1.05, end_um=2050.0):
    """True depth of a contact: the dye's end misses the tip and the tissue is stretched."""
    return end_um + shift_um - stretch * tip_um


def shank(number=0, seed=0, signal=1.0, anchors=(), end_um=2050.0, with_profile=True, tip=TIP):
    """Evidence of one shank whose features follow the labels (``signal`` 1) or nothing at all (0)."""
    rng = np.random.default_rng(seed)
    true = label(truth(tip, end_um=end_um))
    features = {}
    for name, means in MEANS.items():
        walk = np.convolve(rng.standard_normal(tip.size + 4), np.ones(5) / np.sqrt(5), "valid")
        features[name] = signal * means[np.searchsorted(IDS, true)] + 0.45 * walk
    profile = Profile("A", np.full(tip.size, number), tip, features) if with_profile else None
    return ShankEvidence("A", number, tip, profile, DEPTH, label(DEPTH), end_um, anchors=anchors)

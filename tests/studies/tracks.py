"""Invented tracks in one dimension: labels along a track, a true depth map, and features made from the true labels.

What the features tend to be here is written down apart from the program's own knowledge and scattered by population,
animal and structure; the program's model is wrong about these tracks in every scenario.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from leadline.anchoring.evidence import ShankEvidence
from leadline.model.atlas import Structure, Structures
from leadline.model.profile import Profile

ROOT, CORTEX, HIPPOCAMPUS, DENTATE, THALAMUS, STRIATUM, MIDBRAIN, FIBRES, SPACES = range(1, 10)
GROUPS = ((ROOT, "root", None), (CORTEX, "cortex", ROOT), (HIPPOCAMPUS, "hippocampal field CA1", ROOT),
          (DENTATE, "dentate gyrus", HIPPOCAMPUS), (THALAMUS, "thalamus", ROOT), (STRIATUM, "striatum", ROOT),
          (MIDBRAIN, "midbrain", ROOT), (FIBRES, "fibre tracts", ROOT), (SPACES, "ventricles", ROOT))  # fmt: skip
# id, acronym, name, parent, layer, tissue, kind of structure in this file
LEAVES = (
    (11, "Q1", "area Q, layer 1", CORTEX, "1", "grey", "l1"),
    (12, "Q23", "area Q, layer 2/3", CORTEX, "2/3", "grey", "l23"),
    (13, "Q4", "area Q, layer 4", CORTEX, "4", "grey", "l4"),
    (14, "Q5", "area Q, layer 5", CORTEX, "5", "grey", "l5"),
    (15, "Q6", "area Q, layer 6", CORTEX, "6", "grey", "l6"),
    (21, "wm", "white sheet", FIBRES, "", "white", "wm"),
    (22, "wn", "lower white sheet", FIBRES, "", "white", "wm"),
    (31, "Hso", "stratum oriens", HIPPOCAMPUS, "", "grey", "so"),
    (32, "Hsp", "pyramidal layer", HIPPOCAMPUS, "", "grey", "sp"),
    (33, "Hsr", "stratum radiatum", HIPPOCAMPUS, "", "grey", "sr"),
    (34, "Hslm", "stratum lacunosum-moleculare", HIPPOCAMPUS, "", "grey", "slm"),
    (35, "Dmo", "molecular layer", DENTATE, "", "grey", "mo"),
    (36, "Dsg", "granule layer", DENTATE, "", "grey", "sg"),
    (37, "Dpo", "hilus", DENTATE, "", "grey", "po"),
    (41, "Ta", "thalamic nucleus a", THALAMUS, "", "grey", "t1"),
    (42, "Tb", "thalamic nucleus b", THALAMUS, "", "grey", "t2"),
    (43, "Tc", "thalamic nucleus c", THALAMUS, "", "grey", "t3"),
    (51, "ve", "third space", SPACES, "", "ventricle", "v"),
    (61, "Sd", "dorsal striatum", STRIATUM, "", "grey", "s1"),
    (62, "Sv", "ventral striatum", STRIATUM, "", "grey", "s2"),
    (71, "Ma", "midbrain nucleus a", MIDBRAIN, "", "grey", "m1"),
    (72, "Mb", "midbrain nucleus b", MIDBRAIN, "", "grey", "m2"),
    (73, "Mc", "midbrain nucleus c", MIDBRAIN, "", "grey", "m3"),
    (81, "Ka", "body k", ROOT, "", "grey", "u1"),
    (82, "Kb", "body l", ROOT, "", "grey", "u2"),
)  # fmt: skip
KIND = {row[0]: row[6] for row in LEAVES} | {0: "out"}
STRUCTURES = Structures(
    tuple(Structure(i, name[:3], name, parent) for i, name, parent in GROUPS)
    + tuple(Structure(i, a, n, p, layer=layer, tissue=tissue) for i, a, n, p, layer, tissue, _ in LEAVES)
)
CTX = ((11, 120), (12, 260), (13, 140), (14, 260), (15, 240), (21, 170))
COURSES = {
    "hippocampus": (*CTX, (31, 130), (32, 55), (33, 200), (34, 100), (35, 150), (36, 60), (37, 130), (36, 60),
                    (35, 140), (51, 90), (41, 450), (42, 500), (43, 450), (22, 150), (81, 900), (82, 900)),
    "striatum": (*CTX, (61, 1500), (62, 900), (82, 700), (81, 900)),
    "frontal": ((11, 160), (12, 420), (14, 600), (15, 450), (21, 200), (81, 600), (62, 700), (82, 1200)),
    "midbrain": (*CTX, (31, 120), (32, 60), (33, 210), (34, 110), (71, 350), (72, 500), (22, 130), (73, 600),
                 (81, 1400)),
}  # fmt: skip
ODDS = {"hippocampus": 0.4, "striatum": 0.2, "frontal": 0.2, "midbrain": 0.2}
LFP = ("delta_power_db", "theta_power_db", "gamma_power_db", "ripple_power_db", "high_frequency_power_db",
       "neighbour_correlation")  # fmt: skip
UNITS = ("unit_density_per_100um", "spike_rate_hz", "spike_amplitude_uv", "spike_width_s")
NAMES = LFP + UNITS
#        delta theta gamma rippl  high  corr  dens  rate   amp width
HERE = {
    "out": (-1.5, -1.2, -1.8, -1.5, -1.5, 1.2, -1.5, -1.5, -1.2, 0.0),
    "l1": (-0.3, -0.4, -0.9, -0.6, -0.8, 0.4, -1.2, -1.1, -0.7, 0.0),
    "l23": (0.2, -0.2, 0.5, 0.0, 0.0, 0.0, 0.1, -0.5, 0.1, 0.3),
    "l4": (0.0, -0.3, 0.8, 0.1, 0.5, -0.3, 0.6, 0.3, -0.3, 0.0),
    "l5": (0.9, -0.2, 0.4, 0.2, 1.1, -0.4, 1.0, 1.1, 1.1, 0.2),
    "l6": (0.5, -0.3, -0.1, -0.2, 0.2, 0.0, 0.2, -0.3, 0.0, 0.2),
    "wm": (0.0, -0.1, -0.7, -0.4, -0.9, 0.5, -1.3, -1.0, -0.8, -1.0),
    "so": (-0.1, 0.0, 0.0, 0.9, 0.1, 0.0, -0.3, -0.2, 0.0, -0.2),
    "sp": (0.0, 0.3, 0.2, 2.0, 1.2, -0.6, 1.8, 1.0, 0.9, 0.6),
    "sr": (0.4, 0.6, 0.1, 0.6, -0.4, 0.3, -0.9, -0.8, -0.3, 0.0),
    "slm": (0.2, 1.6, 0.3, -0.2, -0.3, 0.2, -1.0, -0.9, -0.4, 0.0),
    "mo": (0.1, 1.1, 0.6, -0.1, 0.0, 0.0, -0.8, -0.7, -0.3, 0.0),
    "sg": (0.0, 0.7, 1.2, 0.2, 0.8, -0.4, 0.9, 0.2, -0.4, 0.2),
    "po": (0.0, 0.5, 1.1, 0.0, 0.5, -0.2, 0.3, 0.3, 0.0, -0.2),
    "v": (0.0, 0.0, -0.9, -0.8, -1.2, 1.0, -1.4, -1.3, -1.0, 0.0),
}
FIXED_SEED = 20240
SCENARIOS = (
    "nominal", "heavy tails", "unknown structures", "landmarks invisible", "label not there", "dye end off 300",
    "animal sd x2", "noise x1.6 longer", "border jitter 90", "short probe", "rough", "no signal",
)  # fmt: skip


@dataclass(frozen=True)
class Track:
    """One invented shank: what the program sees, and the truth of each row (``label_id`` is the animal's own)."""

    evidence: ShankEvidence
    true_depth_um: np.ndarray
    true_id: np.ndarray
    scenario: str = "nominal"

    def without_physiology(self) -> Track:
        return replace(self, evidence=replace(self.evidence, profile=None))


def make_track(seed: int, scenario: str = "nominal") -> Track:
    """One track; the anatomy of a seed is the same in all scenarios that do not change it."""
    rng = np.random.default_rng([FIXED_SEED, seed])
    rough = scenario == "rough"
    course = rng.choice(list(ODDS), p=list(ODDS.values()))
    ids, given = _given_borders(course, rng)
    x, truth, end, inserted = _depth_law(given, rng, scenario)
    border_sd = {"border jitter 90": 90.0}.get(scenario, rng.uniform(20, 50) if rough else 0.0)
    depth = np.arange(-1500.0, max(end, truth.max()) + 1500.0, 5.0)
    animal, lateral = _animal_borders(ids, given, border_sd, rng)
    true_id = _label(ids, animal, truth)
    seen_ids = ids
    if scenario == "label not there":
        ids, animal = _without_one(ids, animal, truth, rng)
        true_id = _label(ids, animal, truth)
    features = _features(x, truth, ids, animal, np.random.default_rng([FIXED_SEED, seed, 7]), scenario)
    evidence = ShankEvidence(
        "A", 0, x, Profile("A", np.zeros(x.size, int), x, features), depth, _label(seen_ids, given, depth), end,
        entry_sd_um=25.0, end_sd_um=25.0, registration_error_um=30.0, inserted_um=inserted,
        lateral_label_id=np.array([_label(seen_ids, b, depth) for b in lateral]),
    )  # fmt: skip
    return Track(evidence, truth, true_id, scenario)


def smooth(at_um, length_um, rng):
    """A draw of a Matern-3/2 process of unit variance."""
    r = np.sqrt(3) * np.abs(at_um[:, None] - at_um[None, :]) / length_um
    return np.linalg.cholesky((1 + r) * np.exp(-r) + 1e-6 * np.eye(at_um.size)) @ rng.standard_normal(at_um.size)


def _given_borders(course, rng):
    ids = np.array([0] + [i for i, _ in COURSES[course]])
    thick = np.array([t for _, t in COURSES[course]]) * np.exp(0.2 * rng.standard_normal(len(ids) - 1))
    return ids, np.concatenate([[0.0], np.cumsum(thick * rng.uniform(1.0, 1.25))[:-1]])


def _depth_law(given, rng, scenario):
    """Row tip distances, their true depths, the dye's end and the manipulator's depth."""
    rows = int(rng.integers(90, 193))
    if scenario == "short probe":
        rows = 50
    x = 175.0 + 20.0 * np.arange(rows)
    end = rng.uniform(0.75, 1.15) * (x[-1] + 150) if rows > 60 else rng.uniform(1200, 3600)
    end = min(end, given[-1] + 500.0)
    offset = 120.0 * rng.standard_normal()
    if scenario == "dye end off 300":
        offset += 300.0 * rng.choice([-1.0, 1.0])
    grid = np.arange(0.0, x[-1] + 400.0, 20.0)
    slope = 1 + 0.062 * rng.standard_normal() + 0.09 * smooth(grid, 700.0, rng)
    fall = np.concatenate([[0.0], np.cumsum(20.0 * np.maximum(slope, 0.5))[:-1]])
    depth = end + offset - fall
    surface = float(np.interp(0.0, depth[::-1], grid[::-1]))
    inserted = surface + 100.0 * rng.standard_normal() if rng.random() < 0.3 and depth[-1] < 0 else None
    return x, np.interp(x, grid, depth), float(end + 20.0 * rng.standard_normal()), inserted


def _animal_borders(ids, given, border_sd, rng):
    """Borders as the animal has them, and as displaced copies of the estimated track see the atlas."""

    def moved(sd, length):
        return np.maximum.accumulate(given + sd * smooth(given, length, rng) + 1e-3 * np.arange(given.size))

    registration = moved(22.0, 600.0) - given
    animal = np.maximum.accumulate(given + registration + border_sd * smooth(given, 250.0, rng))
    return animal, [moved(22.0, 600.0) for _ in range(8)]


def _label(ids, borders, depth):
    return ids[np.searchsorted(borders, depth, side="right")]


def _without_one(ids, borders, truth, rng):
    inside = np.flatnonzero((borders[1:-1] > truth.min()) & (borders[2:] < truth.max())) + 1
    if not inside.size:
        return ids, borders
    gone = int(rng.choice(inside))  # structure gone + 1 lies between borders gone and gone + 1
    middle = (borders[gone] + borders[gone + 1]) / 2
    borders = np.delete(borders, gone + 1)
    borders[gone] = middle
    return np.delete(ids, gone + 1), borders


def _emissions(ids, rng, scenario):
    """Mean of each feature in each structure of this animal."""
    population = np.random.default_rng(FIXED_SEED)
    kinds = sorted(set(KIND.values()))
    base = {
        k: np.array(HERE.get(k, np.zeros(len(NAMES)))) + 0.4 * population.standard_normal(len(NAMES)) for k in kinds
    }
    double = 2.0 if scenario == "animal sd x2" else 1.0
    animal = {k: double * 0.4 * rng.standard_normal(len(NAMES)) for k in kinds}
    odd = {k: 0.8 * rng.standard_normal(len(NAMES)) for k in kinds}
    table = {}
    for i in np.unique(ids):
        k = KIND[int(i)]
        strange = k not in HERE or scenario == "unknown structures"
        table[int(i)] = (odd[k] if strange else base[k] + animal[k]) + 0.25 * rng.standard_normal(len(NAMES))
    if scenario in ("landmarks invisible",) or (scenario == "rough" and rng.random() < 0.4):
        for i in np.unique(ids):
            if KIND[int(i)] in ("sp", "sg", "l4"):
                table[int(i)] = table[int(ids[max(np.flatnonzero(ids == i)[0] - 1, 0)])]
    return table


def _features(x, truth, ids, borders, rng, scenario):
    rough = scenario == "rough"
    table = _emissions(ids, rng, scenario)
    grid = np.arange(truth.min() - 300, truth.max() + 300, 2.5)
    label = _label(ids, borders, grid)
    common = {g: _noise(x, rng, scenario) for g in ("lfp", "units")}
    lost = rng.random() < 0.15 if rough else False
    out = {}
    for f, name in enumerate(NAMES):
        group = "lfp" if name in LFP else "units"
        value = np.array([table[int(i)][f] for i in np.unique(label)])[np.searchsorted(np.unique(label), label)]
        value = value + _gradients(label, grid, (0.6 if rough else 0.25), rng)
        value = _blur(value, 45.0 if group == "lfp" else 20.0)
        shift = 35.0 * rng.standard_normal() if rough else 0.0
        signal = np.interp(truth + shift, grid, value)
        if scenario == "no signal" or rng.random() < 0.12 or lost:
            signal = 0.7 * smooth(x, rng.uniform(100, 500), rng)
        noise = 0.55 * (np.sqrt(0.5) * common[group] + np.sqrt(0.5) * _noise(x, rng, scenario))
        white = (0.15 if group == "lfp" else 0.35) * rng.standard_normal(x.size)
        drift = (0.5 if rough else 0.3) * smooth(x, 1500.0, rng)
        bigger = 1.6 if scenario == "noise x1.6 longer" else rng.uniform(1.0, 1.5) if rough else 1.0
        column = signal + bigger * noise + white + drift
        if scenario == "heavy tails" or rough:
            column = column + 4.0 * rng.standard_normal(x.size) * (rng.random(x.size) < 0.04)
        out[name] = np.exp(0.5 * rng.standard_normal()) * column + rng.standard_normal()
    return _damage(out, x, truth, rng, scenario)


def _noise(x, rng, scenario):
    """Correlated noise of unit variance: exponential or smooth, heavy-tailed in one scenario."""
    long = 2.0 if scenario == "noise x1.6 longer" else 1.0
    length = long * 100.0 * np.exp(0.3 * rng.standard_normal())
    d = np.abs(x[:, None] - x[None, :])
    r = np.sqrt(3) * d / length
    kernel = np.exp(-d / length) if rng.random() < 0.5 else (1 + r) * np.exp(-r)
    drive = rng.standard_t(2.5, x.size) * np.sqrt(0.2) if scenario == "heavy tails" else rng.standard_normal(x.size)
    return np.linalg.cholesky(kernel + 1e-6 * np.eye(x.size)) @ drive


def _gradients(label, grid, sd, rng):
    """A straight gradient through each structure, different for each."""
    out = np.zeros(grid.size)
    cuts = np.concatenate([[0], np.flatnonzero(np.diff(label)) + 1, [label.size]])
    for lo, hi in pairwise(cuts):
        out[lo:hi] = sd * rng.standard_normal() * np.linspace(-1, 1, hi - lo) * min(1.0, (hi - lo) * 2.5 / 300)
    return out


def _blur(value, sd_um):
    reach = int(4 * sd_um / 2.5)
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) * 2.5 / sd_um) ** 2)
    padded = np.pad(value, reach, mode="edge")
    return np.convolve(padded, kernel / kernel.sum(), mode="valid")


def _damage(out, x, truth, rng, scenario):
    """Missing features, dead contacts, sparse sorting, injured cortex at the top."""
    rough = scenario == "rough"
    for name in NAMES:
        if rng.random() < 0.15:
            del out[name]
    if not out:
        out["gamma_power_db"] = rng.standard_normal(x.size)
    dead = rng.random(x.size) < (0.08 if rough else 0.03)
    injured = (truth < rng.uniform(200, 500)) & rough & (rng.random() < 0.5)
    sparse = rough and rng.random() < 0.4
    for name in out:
        out[name] = np.where(dead, np.nan, out[name])
        if name in UNITS:
            out[name] = np.where(injured, np.nanmin(out[name]), out[name])
            if sparse:
                out[name] = np.where(rng.random(x.size) < 0.4, np.nan, out[name])
    return out

"""The compiled kernels and the sampler against plain algebra and brute force."""

import sys
from dataclasses import replace
from itertools import product
from pathlib import Path

import numpy as np
import pytest
from scipy.linalg import block_diag

sys.path.insert(0, str(Path(__file__).parents[1] / "leadline" / "anchoring"))

import invented

from leadline.anchoring.depth_prior import build
from leadline.anchoring.features import GROUPS
from leadline.anchoring.knowledge import builtin
from leadline.anchoring.labels import CELL_UM
from leadline.anchoring.noise import MODELS, correlation, student_evidence
from leadline.anchoring.pack import MIN_STEP_UM, NULL_SHARE, RATE, SHAPE, assemble, independence
from leadline.anchoring.sampler import sample

# a law so tight that two numbers tell the whole depth map: brute force is possible
TIGHT = replace(builtin().depth, scale_sd=0.01, slope_sd=1e-4, border_sd_um=0.01)


def _probe(tip=invented.TIP[:40], law=None):
    shank = replace(invented.shank(tip=tip), end_sd_um=0.01, registration_error_um=0.01)
    prior = build([shank], law or builtin().depth)
    return prior, assemble([shank], prior, invented.STRUCTURES, builtin())


def _two_shanks():
    """Shanks of unlike length, of which the second lacks a feature."""
    first, second = invented.shank(0, seed=1), invented.shank(1, seed=2, tip=invented.TIP[:70])
    features = {k: v for k, v in second.profile.features.items() if k != "spike_rate_hz"}
    shanks = [first, replace(second, profile=replace(second.profile, features=features))]
    prior = build(shanks, builtin().depth)
    return prior, assemble(shanks, prior, invented.STRUCTURES, builtin())


def _plain(packed, depths, c):
    """Log likelihood of one path by dense algebra: label depths of the rows of every shank."""
    total, shanks = 0.0, range(len(packed.features))
    for g, group in enumerate(GROUPS):
        for f, key in enumerate(packed.columns[group]):
            own = [s for s in shanks if key in packed.features[s].columns[group]]
            design = np.concatenate([_design(packed, s, g, depths[s]) for s in own])
            data = np.concatenate(
                [packed.features[s].values[group][packed.features[s].columns[group].index(key)] for s in own]
            )
            noise = block_diag(*(correlation(packed.features[s].tip_distance_um, MODELS[group][c[g]]) for s in own))
            spoken, silent = (
                student_evidence(
                    data[None], design[:, rows], noise, packed.covariance[np.ix_(rows, rows)], mean, SHAPE, RATE
                )
                for rows, mean in (
                    (np.arange(design.shape[1]), packed.mean[group][:, f : f + 1]),
                    (packed.ids.size + np.array(own), np.zeros((len(own), 1))),
                )
            )
            weight = np.mean([independence(packed.features[s].values[group]) for s in own])
            total += weight * np.logaddexp(np.log(1 - NULL_SHARE) + spoken, np.log(NULL_SHARE) + silent)[0]
    return total


def _design(packed, s, g, depth):
    """Shares of labels and intercepts in each row of a shank."""
    table, labels = packed.tables[s], packed.ids.size
    cell = np.clip(np.floor((depth - table.start_um) / CELL_UM + 0.5).astype(int), 0, table.active.shape[1] - 1)
    design = np.zeros((depth.size, labels + len(packed.features)))
    design[:, labels + s] = 1.0
    for r, one in enumerate(cell):
        for label, share in zip(table.active[g, one], table.weight[g, one], strict=True):
            if label >= 0:
                design[r, np.searchsorted(packed.ids, table.ids[label])] += share
    return design


@pytest.mark.parametrize("make", [_probe, _two_shanks])
def test_the_compiled_evidence_is_that_of_dense_algebra(make):
    from leadline.anchoring._kernels import evaluate

    prior, packed = make()
    rng = np.random.default_rng(0)
    z = prior.draw(rng, 12)
    c = rng.integers(0, 4, (12, 2))
    by_group = np.empty((12, 2))
    evaluate(packed.pack, z, c, by_group)
    out = by_group.sum(axis=1)
    seen = 0
    for i in range(12):
        label = prior.mean_um + prior.basis @ z[i]
        depths = [prior.weights(s, f.tip_distance_um) @ label[prior.slice(s)] for s, f in enumerate(packed.features)]
        if all((np.diff(d) < -MIN_STEP_UM).all() for d in depths):
            seen += 1
            # 0.02 % of it: the whitener leaves out what is faint
            assert out[i] == pytest.approx(_plain(packed, depths, c[i]), abs=0.1)
    assert seen > 6


def _middle(value, weight):
    """Half of the width of the central 68 % of weighted values."""
    order = np.argsort(value)
    share = weight[order].cumsum() / weight.sum()
    low, high = value[order][np.searchsorted(share, [0.16, 0.84])]
    return (high - low) / 2


def test_the_sampler_finds_the_mean_spread_and_evidence_of_brute_force():
    from leadline.anchoring._kernels import evaluate

    power = 0.35
    prior, packed = _probe(law=TIGHT)
    assert prior.dims == 2
    # the first coordinate is known to 0.05 and needs a fine grid
    grid = np.array(list(product(np.linspace(-4.0, 4.0, 401), np.linspace(-4.0, 4.0, 41))))
    n = len(grid)
    log_prior = prior.log_ratio(prior.offset_mean_um + grid @ prior.offset_basis) - 0.5 * (grid**2).sum(axis=1)
    log_prior -= np.logaddexp.reduce(log_prior)
    parts, by_group = [], np.empty((n, 2))
    models = list(product(range(4), range(4)))
    for c in models:
        evaluate(packed.pack, grid, np.tile(c, (n, 1)), by_group)
        parts.append(power * by_group.sum(axis=1) + log_prior - np.log(len(models)))
    joint = np.logaddexp.reduce(parts, axis=0)
    log_z = float(np.logaddexp.reduce(joint))
    weight = np.exp(joint - log_z)
    depth = grid @ prior.basis.T + prior.mean_um
    mean = weight @ depth
    # 0.2 % of the mass lies far away, less than one particle: spread is that of the middle
    spread = np.array([_middle(d, weight) for d in depth.T])
    runs = [sample(packed, prior, np.random.default_rng(s), power) for s in range(3)]
    ours = np.concatenate([r.z @ prior.basis.T + prior.mean_um for r in runs])
    assert np.mean([r.log_evidence for r in runs]) == pytest.approx(log_z, abs=0.25)
    assert ours.mean(axis=0) == pytest.approx(mean, abs=0.15 * spread.max())
    middle = np.array([_middle(d, np.ones(len(d))) for d in ours.T])
    assert middle == pytest.approx(spread, rel=0.15)  # the grid is half as coarse as that

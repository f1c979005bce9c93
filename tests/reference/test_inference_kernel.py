"""The compiled kernels and the sampler against plain algebra and brute force."""

import sys
from dataclasses import replace
from itertools import product
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "leadline" / "anchoring"))

import invented

from leadline.anchoring.depth_prior import build
from leadline.anchoring.features import GROUPS
from leadline.anchoring.knowledge import builtin
from leadline.anchoring.labels import CELL_UM
from leadline.anchoring.noise import MODELS, correlation, student_evidence
from leadline.anchoring.pack import NULL_SHARE, RATE, SHAPE, assemble, independence
from leadline.anchoring.sampler import sample

# a law so tight that two numbers tell the whole depth map: brute force is possible
TIGHT = replace(builtin().depth, scale_sd=0.01, slope_sd=1e-4, border_sd_um=0.01)


def _probe(tip=invented.TIP[:40], law=None):
    shank = replace(invented.shank(tip=tip), end_sd_um=0.01, registration_error_um=0.01)
    prior = build([shank], law or builtin().depth)
    return shank, prior, assemble([shank], prior, invented.STRUCTURES, builtin())


def _plain(packed, depth, c):
    """Log likelihood of one path by dense algebra."""
    feature, table = packed.features[0], packed.tables[0]
    cell = np.clip(np.floor((depth - table.start_um) / CELL_UM + 0.5).astype(int), 0, table.active.shape[1] - 1)
    total = 0.0
    for g, group in enumerate(GROUPS):
        design = np.zeros((depth.size, table.ids.size + 1))
        design[:, -1] = 1.0
        for r, one in enumerate(cell):
            for label, share in zip(table.active[g, one], table.weight[g, one], strict=True):
                if label >= 0:
                    design[r, label] += share
        noise = correlation(feature.tip_distance_um, MODELS[group][c[g]])
        data = feature.values[group]
        spoken = student_evidence(data, design, noise, table.covariance, table.mean[group], SHAPE, RATE)
        silent = student_evidence(
            data, np.ones((depth.size, 1)), noise, np.array([[2.5]]), np.zeros((1, len(data))), SHAPE, RATE
        )
        total += independence(data) * np.logaddexp(np.log(1 - NULL_SHARE) + spoken, np.log(NULL_SHARE) + silent).sum()
    return total


def test_the_compiled_evidence_is_that_of_dense_algebra():
    from leadline.anchoring._kernels import evaluate

    _, prior, packed = _probe()
    rng = np.random.default_rng(0)
    z = prior.draw(rng, 12)
    c = rng.integers(0, 4, (12, 2))
    out = np.empty(12)
    evaluate(packed.pack, z, c, out)
    rows = prior.weights(0, packed.features[0].tip_distance_um)
    for i in range(12):
        depth = rows @ (prior.mean_um + prior.basis @ z[i])
        assert out[i] == pytest.approx(_plain(packed, depth, c[i]), abs=0.02)


def test_the_sampler_finds_the_mean_spread_and_evidence_of_brute_force():
    from leadline.anchoring._kernels import evaluate

    power = 0.35
    _, prior, packed = _probe(law=TIGHT)
    assert prior.dims == 2
    side = np.linspace(-4.0, 4.0, 121)
    grid = np.array(list(product(side, side)))
    n = len(grid)
    log_prior = prior.log_ratio(prior.offset_mean_um + grid @ prior.offset_basis) - 0.5 * (grid**2).sum(axis=1)
    log_prior -= np.logaddexp.reduce(log_prior)
    parts, out = [], np.empty(n)
    models = list(product(range(4), range(4)))
    for c in models:
        evaluate(packed.pack, grid, np.tile(c, (n, 1)), out)
        parts.append(power * out + log_prior - np.log(len(models)))
    joint = np.logaddexp.reduce(parts, axis=0)
    log_z = float(np.logaddexp.reduce(joint))
    weight = np.exp(joint - log_z)
    depth = grid @ prior.basis.T + prior.mean_um
    mean = weight @ depth
    sd = np.sqrt(weight @ (depth - mean) ** 2)
    runs = [sample(packed, prior, np.random.default_rng(s), power) for s in range(3)]
    ours = np.concatenate([r.z @ prior.basis.T + prior.mean_um for r in runs])
    assert np.mean([r.log_evidence for r in runs]) == pytest.approx(log_z, abs=0.25)
    assert ours.mean(axis=0) == pytest.approx(mean, abs=0.25 * sd.max())
    assert ours.std(axis=0) == pytest.approx(sd, rel=0.2)

"""The numbers behind the depth posterior against scipy, scikit-learn and closed forms."""

import numpy as np
import pytest
from scipy import integrate, special, stats

from leadline.anchoring.depth_prior import conditioned, matern32
from leadline.anchoring.noise import MODELS, correlation, student_evidence, whitener

RNG = np.random.default_rng(3)
TIP = np.array([200.0, 240.0, 280.0, 330.0, 420.0, 460.0])


def test_matern_covariance_is_that_of_scikit_learn():
    from sklearn.gaussian_process.kernels import Matern

    x = RNG.uniform(0, 2000, 12)
    theirs = Matern(length_scale=250.0, nu=1.5)(x[:, None])
    assert matern32(x[:, None] - x[None, :], 250.0) == pytest.approx(theirs, abs=1e-12)


def test_conditioning_on_anchors_is_gaussian_process_regression_of_scikit_learn():
    from sklearn.gaussian_process import GaussianProcessRegressor
    from sklearn.gaussian_process.kernels import ConstantKernel, Matern

    x = np.linspace(0, 2000, 21)
    rows, value, variance = [3, 11, 17], np.array([40.0, -25.0, 60.0]), np.array([30.0, 10.0, 50.0]) ** 2
    kernel = ConstantKernel(90.0**2, "fixed") * Matern(700.0, "fixed", nu=1.5)
    theirs = GaussianProcessRegressor(kernel, alpha=variance, optimizer=None).fit(x[rows, None], value)
    mean, covariance = theirs.predict(x[:, None], return_cov=True)
    ours = conditioned(np.zeros(21), kernel(x[:, None]), np.eye(21)[rows], value, variance)
    assert ours[0] == pytest.approx(mean, abs=1e-8)
    assert ours[1] == pytest.approx(covariance, abs=1e-6)


def _problem(rows=TIP):
    design = np.column_stack([rows < 300, rows >= 300, np.ones(rows.size)]).astype(float)
    covariance = np.array([[0.9, 0.3, 0.0], [0.3, 1.1, 0.0], [0.0, 0.0, 2.5]])
    mean = np.array([[0.5, 0.0], [-0.4, 1.0], [0.0, 0.0]])
    return design, covariance, mean, RNG.standard_normal((2, rows.size))


def test_evidence_is_scipys_multivariate_student_t():
    design, covariance, mean, data = _problem()
    noise = correlation(TIP, MODELS["lfp"][1])
    shape, rate = 4.0, 1.2
    ours = student_evidence(data, design, noise, covariance, mean, shape, rate)
    n = TIP.size
    shared = special.gammaln(shape + n / 2) - special.gammaln(shape) + shape * np.log(rate) - n / 2 * np.log(2 * np.pi)
    for k in range(2):
        scale = rate / shape * (noise + design @ covariance @ design.T)
        theirs = stats.multivariate_t(design @ mean[:, k], scale, df=2 * shape).logpdf(data[k])
        assert ours[k] + shared == pytest.approx(theirs, abs=1e-9)


def test_evidence_is_the_integral_over_level_and_noise_variance():
    """One feature of one structure: both integrals by the trapezium rule on a fine grid."""
    data, noise = np.array([[0.3, 0.9, -0.2]]), np.eye(3)
    shape, rate, v = 4.0, 1.2, 2.0
    level, variance = np.linspace(-12, 12, 1201)[:, None], np.exp(np.linspace(-6, 4, 801))[None, :]
    joint = stats.norm.pdf(level, 0.5, np.sqrt(v * variance)) * stats.invgamma.pdf(variance, shape, scale=rate)
    for y in data[0]:
        joint = joint * stats.norm.pdf(y, level, np.sqrt(variance))
    whole = integrate.trapezoid(integrate.trapezoid(joint, variance[0], axis=1), level[:, 0])
    ours = student_evidence(data, np.ones((3, 1)), noise, np.array([[v]]), np.array([[0.5]]), shape, rate)[0]
    shared = special.gammaln(shape + 1.5) - special.gammaln(shape) + shape * np.log(rate) - 1.5 * np.log(2 * np.pi)
    assert ours + shared == pytest.approx(np.log(whole), abs=1e-4)


def test_whitening_leaves_unit_noise():
    noise = correlation(TIP, MODELS["units"][3])
    u = whitener(noise)
    assert u @ noise @ u.T == pytest.approx(np.eye(TIP.size), abs=1e-10)
    assert np.triu(u, 1) == pytest.approx(0.0)


@pytest.mark.parametrize(
    ("kind", "feature", "sign"),
    [
        # Stark et al. 2014, Neuron 83, 467: ripples most prominent in the CA1 pyramidal layer
        ("ca_pyramidal", "ripple_power_db", 1),
        # Sullivan et al. 2011, J. Neurosci. 31, 8605: multi-unit activity is largest there
        ("ca_pyramidal", "unit_density_per_100um", 1),
        # Robbins et al. 2013, Front. Neural Circuits 7, 181: axonal spikes of 176 us against 567 us of pyramidal cells
        ("white_matter", "spike_width_s", -1),
        # Senzai et al. 2019, Neuron 101, 500: spike power is largest in deep layer 5
        ("cortex_layer_5", "high_frequency_power_db", 1),
        # Mitzdorf 1985, Physiol. Rev. 65, 37: the first sink (negative) lies in layer 4
        ("cortex_layer_4", "evoked_csd_ua_per_mm3", -1),
        # common practice, no source: middle layers answer a flash at 50-100 ms, deep ones at 100-150 ms
        ("cortex_layer_4", "evoked_latency_s", -1),
        # from memory, Buzsaki 2002, Neuron 33, 325: theta is largest at the hippocampal fissure
        ("ca_slm", "theta_power_db", 1),
        # from memory, Bragin et al. 1995, J. Neurosci. 15, 47: gamma is large in the hilus
        ("dg_hilus", "gamma_power_db", 1),
        # common practice, no source: layer 1 has nearly no somata
        ("cortex_layer_1", "unit_density_per_100um", -1),
        ("ventricle", "spike_rate_hz", -1),
    ],
)
def test_signs_of_the_knowledge_are_those_published(kind, feature, sign):
    from leadline.anchoring.knowledge import builtin

    found = next(t for t in builtin().types if t.name == kind)
    assert np.sign(found.mean[feature]) == sign

"""Compiled inner loops: evidence of a path, and slice moves of many paths. Compiled once, then cached on disk."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numba import njit

LOG_REFUSED = -1e18
# features are padded to whole registers of the processor
LANES = 8


class Pack(NamedTuple):
    """All shanks of one probe in padded arrays: S shanks, G groups, C noise models, R rows, F features, L labels, of
    which the last S are an intercept of each shank.

    ``centre`` (S, R), ``basis`` (S, R, J) : label depth of the rows, ``centre + basis @ z``. ``whitener`` (S, G, C,
    R, B) : entry [r, k] carries row r into whitened row r + k, k < ``band`` (S, G, C). ``white_one`` (S, G, C, R),
    ``white_data`` (S, G, C, R, F). ``square``, ``log_scale``, ``log_null`` (G, C, F) : sum of squares, log
    determinant of the whitener and evidence of mere noise, over the shanks that have the feature; ``counted`` (G, F)
    their rows. ``pattern`` (G, F) : which row of ``has`` (G, P, S) names those shanks, ascending. ``power`` (G, F) :
    what a feature counts beside its correlated fellows. ``mean`` (G, L, F). ``precision`` (L, L),
    ``log_covariance``. ``active``, ``weight`` (S, G, M, 8) and ``start`` (S,) : cells of the label tables.
    """

    n_rows: Any
    n_features: Any
    n_cells: Any
    centre: Any
    basis: Any
    whitener: Any
    band: Any
    white_one: Any
    white_data: Any
    square: Any
    log_scale: Any
    counted: Any
    pattern: Any
    has: Any
    power: Any
    mean: Any
    precision: Any
    log_covariance: float
    log_null: Any
    active: Any
    weight: Any
    start: Any
    cell_um: float
    shape: float
    rate: float
    null_share: float
    min_step: float
    offset_mean: float
    offset_basis: Any
    ratio: Any


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _cholesky(a, n):  # type: ignore[no-untyped-def]  # pragma: no cover
    """In place, upper: ``U' U``, passing over what is zero; returns the log determinant."""
    total = 1.0
    log = 0.0
    for k in range(n):
        root = np.sqrt(max(a[k, k], 1e-12))
        total *= root
        if total > 1e100 or total < 1e-100:
            log += np.log(total)
            total = 1.0
        share = 1 / root
        for j in range(k, n):
            a[k, j] *= share
        for i in range(k + 1, n):
            f = a[k, i]
            if f != 0:
                for j in range(i, n):
                    a[i, j] -= f * a[k, j]
    return 2 * (log + np.log(total))


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _design(p, s, g, c, depth, white, first, last):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Whitened label membership of the rows of one shank, ``white`` (L, R and the longest band), and the range of
    rows that each label touches."""
    rows, labels = p.n_rows[s], first.size
    band = p.band[s, g, c]
    for i in range(labels):
        first[i] = rows
        last[i] = 0
    for r in range(rows):
        cell = int((depth[r] - p.start[s]) / p.cell_um + 0.5)
        cell = min(max(cell, 0), p.n_cells[s] - 1)
        for a in range(p.active.shape[3]):
            label = p.active[s, g, cell, a]
            if label < 0:
                break
            if last[label] == 0:
                first[label] = r
                white[label, r:] = 0.0
            last[label] = min(rows, r + band)
            share = p.weight[s, g, cell, a]
            for start in range(0, band, LANES):
                for k in range(LANES):
                    white[label, r + start + k] += share * p.whitener[s, g, c, r, start + k]
    own = labels - p.n_rows.size + s
    first[own] = 0
    last[own] = rows
    for t in range(rows):
        white[own, t] = p.white_one[s, g, c, t]


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _add_products(white, first, last, data, wide, has, gram, cross):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Add one shank's products of whitened labels with each other, to the patterns of ``gram`` (P, L, L) that ``has``
    (P,) names, and with the ``data`` (R, F), to ``cross`` (L, F)."""
    for i in range(first.size):
        if last[i] == 0:
            continue
        for j in range(i + 1):
            low, high = max(first[i], first[j]), min(last[i], last[j])
            if low < high:
                total = np.float32(0.0)
                for t in range(low, high):
                    total += white[i, t] * white[j, t]
                for pattern in range(gram.shape[0]):
                    if has[pattern]:
                        gram[pattern, j, i] += total
        for t in range(first[i], last[i]):
            w = white[i, t]
            for f in range(wide):
                cross[i, f] += w * data[t, f]


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _expected(mean, gram, used, low, high, b):  # type: ignore[no-untyped-def]  # pragma: no cover
    """``b = gram @ mean`` for features ``low`` to ``high``; ``gram`` : its upper triangle, ``used`` its rows not 0."""
    b[:] = 0.0
    for e in range(used.size):
        for a in range(e + 1):
            i, k = used[a], used[e]
            known = gram[i, k]
            if known != 0:
                for f in range(low, high):
                    b[i, f] += known * mean[k, f]
                if i != k:
                    for f in range(low, high):
                        b[k, f] += known * mean[i, f]


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _left(mean, gram, cross, factor, used, low, high, b, rss):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Take what the labels explain off the sums of squares ``rss`` (F,) of features ``low`` to ``high``; ``used`` :
    labels that any row touches; ``gram``, ``factor`` : upper triangles."""
    _expected(mean, gram, used, low, high, b)
    for i in used:
        for f in range(low, high):
            rss[f] += mean[i, f] * (b[i, f] - 2 * cross[i, f])
            b[i, f] = cross[i, f] - b[i, f]
    for k in range(b.shape[0]):
        share = 1 / factor[k, k]
        for f in range(low, high):
            b[k, f] *= share
            rss[f] -= b[k, f] * b[k, f]
        for i in range(k + 1, b.shape[0]):
            share = factor[k, i]
            if share != 0:
                for f in range(low, high):
                    b[i, f] -= share * b[k, f]


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def group_evidence(p, g, c, depth, out):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Log evidence of each feature of a group at label depths ``depth`` (S, R), emissions integrated out (Student-t),
    into ``out`` (F,).

    With y ~ N(A mu, v C), mu ~ N(m, v V), v ~ IG(shape, rate): Bishop 2006, section 2.3.7.
    """
    labels, features = p.mean.shape[1], p.n_features[g]
    wide = (features + LANES - 1) // LANES * LANES
    patterns = p.pattern[g, features - 1] + 1
    gram = np.zeros((patterns, labels, labels))
    cross = np.zeros((labels, wide), np.float32)
    white = np.empty((labels, p.centre.shape[1] + p.whitener.shape[4]), np.float32)
    first, last = np.empty(labels, np.int64), np.empty(labels, np.int64)
    touched = np.zeros(labels, np.bool_)
    for s in range(p.n_rows.size):
        if p.n_rows[s] > 0:
            _design(p, s, g, c, depth[s], white, first, last)
            _add_products(white, first, last, p.white_data[s, g, c], wide, p.has[g, :, s], gram, cross)
            for i in range(labels):
                touched[i] |= last[i] > 0
    used = np.flatnonzero(touched)
    b, rss = np.empty((labels, features)), p.square[g, c].copy()
    high = 0
    for pattern in range(patterns):
        low = high
        while high < features and p.pattern[g, high] == pattern:
            high += 1
        factor = gram[pattern] + p.precision
        log_det = _cholesky(factor, labels) + p.log_covariance
        _left(p.mean[g], gram[pattern], cross, factor, used, low, high, b, rss)
        for f in range(low, high):
            fit = np.log(p.rate + 0.5 * max(rss[f], 0.0))
            out[f] = p.log_scale[g, c, f] - 0.5 * log_det - (p.shape + 0.5 * p.counted[g, f]) * fit


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def follow(p, z, depth):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Label depths (S, R) of one path into ``depth``; whether they fall all along each shank."""
    for s in range(p.n_rows.size):
        for r in range(p.n_rows[s]):
            d = p.centre[s, r]
            for j in range(z.size):
                d += p.basis[s, r, j] * z[j]
            depth[s, r] = d
            if r > 0 and depth[s, r - 1] - d < p.min_step:
                return False
    return True


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def log_likelihood(p, g, c, depth, out):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Log evidence of a group of features at label depths, each feature mixed with one that says nothing."""
    if p.n_features[g] == 0:
        return 0.0
    group_evidence(p, g, c, depth, out)
    total = 0.0
    for f in range(p.n_features[g]):
        null = p.log_null[g, c, f]
        gain = out[f] - null
        if gain > 0:
            mixed = gain + np.log((1 - p.null_share) + p.null_share * np.exp(-gain))
        else:
            mixed = np.log(p.null_share + (1 - p.null_share) * np.exp(gain))
        total += p.power[g, f] * (mixed + null)
    return total


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def log_offset_ratio(p, z):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Log of the two-part offset prior over the wide one, up to a constant."""
    x = p.offset_mean
    for j in range(z.size):
        x += p.offset_basis[j] * z[j]
    a = p.ratio[0] - 0.5 * x * x * p.ratio[1]
    b = p.ratio[2] - 0.5 * x * x * p.ratio[3]
    top = max(a, b)
    return top + np.log(np.exp(a - top) + np.exp(b - top)) + 0.5 * x * x * p.ratio[3]


@njit(cache=True, nogil=True, error_model="numpy")
def evaluate(p, z, c, ll):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Log likelihood of each group of features for paths ``z`` (N, J) into ``ll`` (N, G)."""
    depth, scratch = np.empty(p.centre.shape), np.empty(p.mean.shape[2])
    for i in range(z.shape[0]):
        falls = follow(p, z[i], depth)
        for g in range(ll.shape[1]):
            ll[i, g] = log_likelihood(p, g, c[i, g], depth, scratch) if falls else LOG_REFUSED


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _height(p, power, z, a, ll):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Log posterior of a path over the density of the fitted Gaussian, up to a constant."""
    total = power * ll.sum() + log_offset_ratio(p, z)
    for j in range(z.size):
        total += 0.5 * (a[j] ** 2 - z[j] ** 2)
    return total


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _on_ellipse(centre, root, a, nu, theta, new_a, new_z):  # type: ignore[no-untyped-def]  # pragma: no cover
    """The point of the ellipse through ``a`` and ``nu`` at an angle, and its path ``new_z``."""
    cos, sin = np.cos(theta), np.sin(theta)
    for j in range(a.size):
        new_a[j] = a[j] * cos + nu[j] * sin
    for j in range(a.size):
        total = centre[j]
        for k in range(j + 1):
            total += root[j, k] * new_a[k]
        new_z[j] = total


@njit(cache=True, nogil=True, error_model="numpy")
def slice_move(  # type: ignore[no-untyped-def]  # pragma: no cover
    p, power, centre, root, z, ll, c, a, nu, log_u, angle, group, model, log_v, evaluations
):
    """One elliptical slice move of every path under the Gaussian ``centre + root @ a`` (Murray et al. 2010, AISTATS;
    generalised to a fitted Gaussian as in Nishihara et al. 2014, JMLR 15, 2087), and one Metropolis step to the noise
    ``model`` of one ``group``. Changes ``z``, ``ll``, ``c``, ``a``."""
    dims = z.shape[1]
    depth, scratch = np.empty(p.centre.shape), np.empty(p.mean.shape[2])
    new_a, new_z, new_ll = np.empty(dims), np.empty(dims), np.empty(ll.shape[1])
    for i in range(z.shape[0]):
        level = _height(p, power, z[i], a[i], ll[i]) + log_u[i]
        theta = angle[i, 0] * 2 * np.pi
        low, high = theta - 2 * np.pi, theta
        for shrink in range(1, angle.shape[1]):
            _on_ellipse(centre, root, a[i], nu[i], theta, new_a, new_z)
            evaluations[i] += 1
            if follow(p, new_z, depth):
                for g in range(new_ll.size):
                    new_ll[g] = log_likelihood(p, g, c[i, g], depth, scratch)
                if _height(p, power, new_z, new_a, new_ll) > level:
                    z[i], a[i], ll[i] = new_z, new_a, new_ll
                    break
            if theta < 0:
                low = theta
            else:
                high = theta
            theta = low + (high - low) * angle[i, shrink]
        if follow(p, z[i], depth):
            g = group[i]
            other = log_likelihood(p, g, model[i], depth, scratch)
            if log_v[i] < power * (other - ll[i, g]):
                c[i, g], ll[i, g] = model[i], other

"""Compiled inner loops: evidence of a path, and slice moves of many paths. Compiled once, then cached on disk."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numba import njit

LOG_REFUSED = -1e18


class Pack(NamedTuple):
    """All shanks of one probe in padded arrays: S shanks, G groups, C noise models, R rows, F features, L labels.

    ``centre`` (S, R), ``basis`` (S, R, J) : label depth of the rows, ``centre + basis @ z``. ``whitener`` (S, G, C,
    R, R) : entry [r, t] carries row r into whitened row t. ``white_one`` (S, G, C, R), ``white_data``
    (S, G, C, F, R), ``square`` (S, G, C, F) its sum of squares. ``log_scale`` (S, G, C) : log determinant of the
    whitener. ``power`` (S, G, F) : what a feature counts beside its correlated fellows. ``mean`` (S, G, F, L).
    ``precision`` (S, L, L), ``log_covariance`` (S,). ``log_null`` (S, G, C, F). ``active``, ``weight``
    (S, G, M, 8) and ``start`` (S,) : cells of the label tables.
    """

    n_rows: Any
    n_features: Any
    n_labels: Any
    n_cells: Any
    centre: Any
    basis: Any
    whitener: Any
    white_one: Any
    white_data: Any
    square: Any
    log_scale: Any
    power: Any
    mean: Any
    precision: Any
    log_covariance: Any
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
    """In place, lower; returns the log determinant."""
    total = 0.0
    for i in range(n):
        for j in range(i + 1):
            s = a[i, j]
            for k in range(j):
                s -= a[i, k] * a[j, k]
            if i == j:
                s = np.sqrt(max(s, 1e-12))
                a[i, i] = s
                total += 2 * np.log(s)
            else:
                a[i, j] = s / a[j, j]
    return total


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _design(p, s, g, c, depth, white):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Whitened label membership of every row, ``white`` (L, R)."""
    rows, last = p.n_rows[s], p.n_labels[s] - 1
    white[: last + 1, :rows] = 0.0
    for r in range(rows):
        cell = int((depth[r] - p.start[s]) / p.cell_um + 0.5)
        cell = min(max(cell, 0), p.n_cells[s] - 1)
        for a in range(p.active.shape[3]):
            label = p.active[s, g, cell, a]
            if label < 0:
                break
            share = np.float32(p.weight[s, g, cell, a])
            for t in range(r, rows):
                white[label, t] += share * p.whitener[s, g, c, r, t]
    for t in range(rows):
        white[last, t] = p.white_one[s, g, c, t]


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _products(p, s, g, c, white, gram, cross):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Products of whitened labels with each other, ``gram`` (L, L), and with the data, ``cross`` (F, L)."""
    rows, features = p.n_rows[s], p.n_features[s, g]
    for i in range(gram.shape[0]):
        for j in range(i + 1):
            total = np.float32(0.0)
            for t in range(rows):
                total += white[i, t] * white[j, t]
            gram[i, j] = total
            gram[j, i] = total
        for f in range(features):
            total = np.float32(0.0)
            for t in range(rows):
                total += white[i, t] * p.white_data[s, g, c, f, t]
            cross[f, i] = total


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def _explained(mean, gram, cross, factor, b):  # type: ignore[no-untyped-def]  # pragma: no cover
    """What the labels take off the sum of squares of one feature."""
    labels, rss = b.size, 0.0
    for i in range(labels):
        total = 0.0
        for j in range(labels):
            total += gram[i, j] * mean[j]
        rss += mean[i] * (total - 2 * cross[i])
        b[i] = cross[i] - total
    for i in range(labels):
        total = b[i]
        for k in range(i):
            total -= factor[i, k] * b[k]
        b[i] = total / factor[i, i]
        rss -= b[i] * b[i]
    return -rss


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def group_evidence(p, s, g, c, depth, white, out):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Log evidence of each feature of a group, emissions integrated out (Student-t), into ``out`` (F,).

    With y ~ N(A mu, v C), mu ~ N(m, v V), v ~ IG(shape, rate): Bishop 2006, section 2.3.7.
    """
    rows, labels, features = p.n_rows[s], p.n_labels[s], p.n_features[s, g]
    _design(p, s, g, c, depth, white)
    gram, cross = np.empty((labels, labels)), np.empty((features, labels))
    _products(p, s, g, c, white, gram, cross)
    factor = gram + p.precision[s, :labels, :labels]
    log_det = _cholesky(factor, labels) + p.log_covariance[s]
    b = np.empty(labels)
    for f in range(features):
        rss = p.square[s, g, c, f] - _explained(p.mean[s, g, f], gram, cross[f], factor, b)
        fit = (p.shape + 0.5 * rows) * np.log(p.rate + 0.5 * max(rss, 0.0))
        out[f] = p.log_scale[s, g, c] - 0.5 * log_det - fit


@njit(cache=True, nogil=True, fastmath=True, error_model="numpy")
def log_likelihood(p, z, c, depth, white, out):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Log evidence of all shanks for one path, each feature mixed with one that says nothing."""
    total = 0.0
    for s in range(p.n_rows.size):
        for r in range(p.n_rows[s]):
            d = p.centre[s, r]
            for j in range(z.size):
                d += p.basis[s, r, j] * z[j]
            depth[r] = d
            if r > 0 and depth[r - 1] - d < p.min_step:
                return LOG_REFUSED
        for g in range(p.n_features.shape[1]):
            if p.n_features[s, g] == 0:
                continue
            group_evidence(p, s, g, c[g], depth, white, out)
            for f in range(p.n_features[s, g]):
                null = p.log_null[s, g, c[g], f]
                gain = out[f] - null
                if gain > 0:
                    mixed = gain + np.log((1 - p.null_share) + p.null_share * np.exp(-gain))
                else:
                    mixed = np.log(p.null_share + (1 - p.null_share) * np.exp(gain))
                total += p.power[s, g, f] * (mixed + null)
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
def evaluate(p, z, c, out):  # type: ignore[no-untyped-def]  # pragma: no cover
    """Log likelihood of paths ``z`` (N, J) into ``out`` (N,)."""
    width = p.centre.shape[1]
    depth, white = np.empty(width), np.empty((p.mean.shape[3], width), np.float32)
    scratch = np.empty(max(1, p.mean.shape[2]))
    for i in range(z.shape[0]):
        out[i] = log_likelihood(p, z[i], c[i], depth, white, scratch)


@njit(cache=True, nogil=True, error_model="numpy")
def slice_move(  # type: ignore[no-untyped-def]  # pragma: no cover
    p, power, centre, root, z, ll, c, a, nu, log_u, angle, evaluations
):
    """One elliptical slice move of every path under the Gaussian ``centre + root @ a`` (Murray et al. 2010, AISTATS;
    generalised to a fitted Gaussian as in Nishihara et al. 2014, JMLR 15, 2087). Changes ``z``, ``ll``, ``a``."""
    dims = z.shape[1]
    width = p.centre.shape[1]
    depth, white = np.empty(width), np.empty((p.mean.shape[3], width), np.float32)
    scratch = np.empty(max(1, p.mean.shape[2]))
    new_a, new_z = np.empty(dims), np.empty(dims)
    for i in range(z.shape[0]):
        level = power * ll[i] + log_offset_ratio(p, z[i]) + log_u[i]
        for j in range(dims):
            level += 0.5 * (a[i, j] ** 2 - z[i, j] ** 2)
        theta = angle[i, 0] * 2 * np.pi
        low, high = theta - 2 * np.pi, theta
        for shrink in range(1, angle.shape[1] + 1):
            cos, sin = np.cos(theta), np.sin(theta)
            for j in range(dims):
                new_a[j] = a[i, j] * cos + nu[i, j] * sin
            for j in range(dims):
                total = centre[j]
                for k in range(j + 1):
                    total += root[j, k] * new_a[k]
                new_z[j] = total
            value = log_likelihood(p, new_z, c[i], depth, white, scratch)
            evaluations[i] += 1
            here = power * value + log_offset_ratio(p, new_z)
            for j in range(dims):
                here += 0.5 * (new_a[j] ** 2 - new_z[j] ** 2)
            if here > level:
                z[i] = new_z
                a[i] = new_a
                ll[i] = value
                break
            if shrink == angle.shape[1]:
                break
            if theta < 0:
                low = theta
            else:
                high = theta
            theta = low + (high - low) * angle[i, shrink]

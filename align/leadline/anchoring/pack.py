"""The evidence of one probe laid out for the compiled kernels."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.anchoring.features import GROUPS, Column, FeatureSet, prepare_probe
from leadline.anchoring.labels import CELL_UM, NOISE_VARIANCE, LabelTable, intercepts, label_prior, tabulate
from leadline.anchoring.noise import BAND, MODELS, SILENT_MODELS, NoiseModel, correlation, flat_evidence, whitener
from leadline.base.arrays import BoolArray, FloatArray, IntArray

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.depth_prior import DepthPrior
    from leadline.anchoring.evidence import ShankEvidence
    from leadline.anchoring.knowledge import Knowledge
    from leadline.model.atlas import Structures

SHAPE, RATE = 4.0, 1.2
NULL_SHARE = 0.15
USUAL_INDEPENDENCE = 0.8
MIN_STEP_UM = 2.0
REACH_SD = 4.0
REACH_UM = 300.0


@dataclass(frozen=True, slots=True, eq=False)
class Packed:
    """``pack`` : the kernel's arrays. ``features``, ``tables`` : of each shank. ``ids`` : (L,) labels that any shank
    may cross; ``mean``, ``covariance`` : what is known of them beforehand. ``columns`` : the features by group.
    ``log_silent`` : log evidence of all features as smooth noise that knows no labels, with the same powers."""

    pack: Any
    features: tuple[FeatureSet, ...]
    tables: tuple[LabelTable | None, ...]
    ids: IntArray
    columns: dict[str, tuple[Column, ...]]
    mean: dict[str, FloatArray]
    covariance: FloatArray
    log_silent: float

    @property
    def size(self) -> float:
        """Rows times features, as far as these are independent."""
        return float((self.pack.power * self.pack.counted).sum())

    @property
    def speaking(self) -> int:
        """Number of shanks that have features."""
        return sum(f.informative for f in self.features)

    @property
    def informative(self) -> bool:
        """Whether any shank has features."""
        return self.speaking > 0


def assemble(
    shanks: Sequence[ShankEvidence], prior: DepthPrior, structures: Structures, knowledge: Knowledge
) -> Packed:
    """Prepare features and label tables of every shank and pad them into arrays.

    What a label sounds like is unknown but the same in all shanks of the probe.
    """
    features = prepare_probe([s.profile for s in shanks])
    nothing = prepare_probe([None])[0]
    features = tuple(f if f.informative else nothing for f in features)
    tables = tuple(
        tabulate(s, _reach(prior, i)) if f.informative else None
        for i, (s, f) in enumerate(zip(shanks, features, strict=True))
    )
    ids = np.unique(np.concatenate([np.zeros(0, np.int64), *(t.ids for t in tables if t is not None)]))
    columns = {g: _by_owners(features, g) for g in GROUPS}
    mean, covariance = label_prior(ids, columns, len(shanks), structures, knowledge)
    whole = Packed(None, features, tables, ids, columns, mean, covariance, 0.0)
    pack = _filled(_empty(whole, prior), whole, prior)
    return Packed(pack, features, tables, ids, columns, mean, covariance, _log_silent(whole, pack.power))


def _by_owners(features: Sequence[FeatureSet], group: str) -> tuple[Column, ...]:
    """The columns that any shank has; those that the same shanks have stand together."""
    every = dict.fromkeys(key for f in features for key in f.columns[group])
    return tuple(sorted(every, key=lambda key: [key in f.columns[group] for f in features]))


def _reach(prior: DepthPrior, shank: int) -> FloatArray:
    """Label depths that the rows of a shank may take, (low, high)."""
    rows = prior.slice(shank)
    mean, sd = prior.mean_um[rows], np.sqrt((prior.basis[rows] ** 2).sum(axis=1))
    span = REACH_SD * sd * prior.law.offset_sd_um / prior.law.stray_offset_sd_um
    return np.array([(mean - span).min() - REACH_UM, (mean + span).max() + REACH_UM])


def independence(data: FloatArray) -> float:
    """What one feature of ``data`` (F, R) counts: the effective number of independent features over their number.

    The number is the participation ratio of the correlations of row-to-row differences, over that of usual
    recordings, since the power of the whole likelihood was learned on those.
    """
    steps = np.diff(data, axis=1)
    steps = steps[steps.std(axis=1) > 1e-9]
    if len(steps) < 2:
        return 1.0
    values = np.linalg.eigvalsh(np.corrcoef(steps))
    return float(min(1.0, values.sum() ** 2 / (values**2).sum() / len(steps) / USUAL_INDEPENDENCE))


def owners(whole: Packed, group: str) -> BoolArray:
    """Which shank has which feature, ``(F, S)``."""
    return np.array([[key in f.columns[group] for f in whole.features] for key in whole.columns[group]], bool).reshape(
        len(whole.columns[group]), len(whole.features)
    )


def _empty(whole: Packed, prior: DepthPrior) -> Any:
    """The kernel's arrays, padded to the largest shank and group."""
    from leadline.anchoring._kernels import LANES, Pack

    features, tables, law = whole.features, [t for t in whole.tables if t is not None], prior.law
    n, groups, models = len(features), len(GROUPS), len(MODELS["lfp"])
    rows = max(1, *(f.tip_distance_um.size for f in features))
    wide = max(1, *(len(whole.columns[g]) for g in GROUPS))
    labels = whole.ids.size + n
    cells, slots = (max([1, *(t.active.shape[k] for t in tables)]) for k in (1, 2))
    shape = (n, groups, models)
    return Pack(
        n_rows=np.array([f.tip_distance_um.size for f in features], np.int64),
        n_features=np.array([len(whole.columns[g]) for g in GROUPS], np.int64),
        n_cells=np.array([1 if t is None else t.active.shape[1] for t in whole.tables], np.int64),
        centre=np.zeros((n, rows)),
        basis=np.zeros((n, rows, prior.dims)),
        whitener=np.zeros((*shape, rows, BAND), np.float32),
        band=np.ones(shape, np.int64),
        white_one=np.zeros((*shape, rows), np.float32),
        white_data=np.zeros((*shape, rows, -(-wide // LANES) * LANES), np.float32),
        square=np.zeros((groups, models, wide)),
        log_scale=np.zeros((groups, models, wide)),
        counted=np.zeros((groups, wide)),
        pattern=np.zeros((groups, wide), np.int64),
        has=np.zeros((groups, max(1, wide), n), np.bool_),
        power=np.zeros((groups, wide)),
        mean=np.zeros((groups, labels, wide)),
        precision=np.linalg.inv(whole.covariance),
        log_covariance=float(np.linalg.slogdet(whole.covariance)[1]),
        log_null=np.zeros((groups, models, wide)),
        active=np.full((n, groups, cells, slots), -1, np.int64),
        weight=np.zeros((n, groups, cells, slots), np.float32),
        start=np.zeros(n),
        cell_um=CELL_UM,
        shape=SHAPE,
        rate=RATE,
        null_share=NULL_SHARE,
        min_step=MIN_STEP_UM,
        offset_mean=prior.offset_mean_um,
        offset_basis=prior.offset_basis,
        ratio=np.array(
            [
                np.log((1 - law.stray_share) / law.offset_sd_um),
                law.offset_sd_um**-2,
                np.log(law.stray_share / law.stray_offset_sd_um),
                law.stray_offset_sd_um**-2,
            ]
        ),
    )


def _filled(pack: Any, whole: Packed, prior: DepthPrior) -> Any:
    """The arrays with the evidence in them; rows run from the tip's first to the last."""
    for s, (feature, table) in enumerate(zip(whole.features, whole.tables, strict=True)):
        if table is not None:
            r, cells = feature.tip_distance_um.size, table.active.shape[1]
            at = prior.weights(s, feature.tip_distance_um)
            pack.centre[s, :r] = at @ prior.mean_um[prior.slice(s)]
            pack.basis[s, :r] = at @ prior.basis[prior.slice(s)]
            place = np.append(np.searchsorted(whole.ids, table.ids), -1)
            pack.active[s, :, :cells] = place[table.active]
            pack.weight[s, :, :cells] = table.weight
            pack.start[s] = table.start_um
    for g, group in enumerate(GROUPS):
        has = owners(whole, group)
        if not len(has):
            continue
        patterns, which = np.unique(has, axis=0, return_inverse=True)
        k = len(has)
        pack.has[g, : len(patterns)] = patterns
        pack.pattern[g, :k] = which.reshape(-1)
        pack.counted[g, :k] = has @ pack.n_rows
        pack.mean[g, :, :k] = whole.mean[group]
        alone = [independence(f.values[group]) if f.informative else 0.0 for f in whole.features]
        pack.power[g, :k] = has @ alone / has.sum(axis=1)
        for c, model in enumerate(MODELS[group]):
            for shank in np.flatnonzero(has.any(axis=0)).tolist():
                _whiten(pack, whole, shank, g, c, has)
            pack.log_null[g, c, :k] = _flat(whole, group, has, model)
    return pack


def _whiten(pack: Any, whole: Packed, s: int, g: int, c: int, has: BoolArray) -> None:
    """One shank's features whitened by one noise model."""
    feature, group = whole.features[s], GROUPS[g]
    white = whitener(correlation(feature.tip_distance_um, MODELS[group][c]))
    r = len(white)
    row, column = np.nonzero(white)
    pack.band[s, g, c] = 1 + (row - column).max()
    for k in range(pack.band[s, g, c]):
        pack.whitener[s, g, c, : r - k, k] = np.diag(white, -k)
    pack.white_one[s, g, c, :r] = white.sum(axis=1)
    own = np.flatnonzero(has[:, s])
    data = _values(whole, group, s, own) @ white.T
    pack.white_data[s, g, c, :r, own] = data
    pack.square[g, c, own] += (data**2).sum(axis=1)
    pack.log_scale[g, c, own] += np.log(np.diag(white)).sum()


def _values(whole: Packed, group: str, s: int, rows: IntArray) -> FloatArray:
    """The features ``rows`` of the probe as one shank has them, ``(F, R)``."""
    own = whole.features[s].columns[group]
    return whole.features[s].values[group][[own.index(whole.columns[group][f]) for f in rows]]


def _flat(whole: Packed, group: str, has: BoolArray, model: NoiseModel) -> FloatArray:
    """Log evidence ``(F,)`` of every feature of a group as an intercept and noise."""
    out = np.zeros(len(has))
    for pattern in np.unique(has, axis=0):
        rows, shanks = np.flatnonzero((has == pattern).all(axis=1)), np.flatnonzero(pattern)
        noise = [correlation(whole.features[s].tip_distance_um, model) for s in shanks]
        data = [_values(whole, group, int(s), rows) for s in shanks]
        out[rows] = flat_evidence(data, noise, intercepts(len(shanks)) / NOISE_VARIANCE, SHAPE, RATE)
    return out


def _log_silent(whole: Packed, power: FloatArray) -> float:
    """Log evidence that no feature knows of labels: smooth noise of unknown length, averaged over lengths."""
    total = 0.0
    for g, group in enumerate(GROUPS):
        has = owners(whole, group)
        if len(has):
            each = np.array([_flat(whole, group, has, m) for m in SILENT_MODELS])
            one = np.logaddexp.reduce(each, axis=0) - np.log(len(SILENT_MODELS))
            total += float(power[g, : len(has)] @ one)
    return total

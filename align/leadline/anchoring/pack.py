"""The evidence of one probe laid out for the compiled kernels."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.anchoring.features import GROUPS, FeatureSet, prepare
from leadline.anchoring.labels import CELL_UM, LabelTable, tabulate
from leadline.anchoring.noise import MODELS, SILENT_MODELS, correlation, student_evidence, whitener

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.depth_prior import DepthPrior
    from leadline.anchoring.evidence import ShankEvidence
    from leadline.anchoring.knowledge import Knowledge
    from leadline.base.arrays import FloatArray
    from leadline.model.atlas import Structures

SHAPE, RATE = 4.0, 1.2
NULL_SHARE = 0.15
USUAL_INDEPENDENCE = 0.8
MIN_STEP_UM = 2.0
REACH_SD = 4.0
REACH_UM = 300.0


@dataclass(frozen=True, slots=True, eq=False)
class Packed:
    """``pack`` : the kernel's arrays. ``features``, ``tables`` : of each shank. ``log_silent`` : log evidence of all
    features as smooth noise that knows no labels, with the same powers."""

    pack: Any
    features: tuple[FeatureSet, ...]
    tables: tuple[LabelTable | None, ...]
    log_silent: float

    @property
    def informative(self) -> bool:
        """Whether any shank has features."""
        return any(f.informative for f in self.features)


def assemble(
    shanks: Sequence[ShankEvidence], prior: DepthPrior, structures: Structures, knowledge: Knowledge
) -> Packed:
    """Prepare features and label tables of every shank and pad them into arrays."""
    features = tuple(prepare(s.profile) for s in shanks)
    features = tuple(f if f.informative else prepare(None) for f in features)
    sd = np.sqrt((prior.basis**2).sum(axis=1))
    tables: list[LabelTable | None] = []
    for i, (shank, feature) in enumerate(zip(shanks, features, strict=True)):
        if not feature.informative:
            tables.append(None)
            continue
        mean, spread = prior.mean_um[prior.slice(i)], sd[prior.slice(i)]
        span = prior.law.offset_sd_um / prior.law.stray_offset_sd_um
        reach = np.array([(mean - REACH_SD * spread * span).min(), (mean + REACH_SD * spread * span).max()])
        tables.append(tabulate(shank, feature, structures, knowledge, reach + np.array([-REACH_UM, REACH_UM])))
    pack = _pack(prior, features, tables)
    return Packed(pack, features, tuple(tables), _log_silent(features, pack.power))


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


def _pack(prior: DepthPrior, features: Sequence[FeatureSet], tables: Sequence[LabelTable | None]) -> Any:
    from leadline.anchoring._kernels import Pack

    n, g_count, c_count = len(features), len(GROUPS), len(MODELS["lfp"])
    rows = max(1, *(f.tip_distance_um.size for f in features))
    wide = max(1, *(len(f.values[g]) for f in features for g in GROUPS))
    labels = max([2, *(t.ids.size + 1 for t in tables if t is not None)])
    cells = max([1, *(t.active.shape[1] for t in tables if t is not None)])
    slots = max([1, *(t.active.shape[2] for t in tables if t is not None)])
    shape = (n, g_count, c_count)
    law = prior.law
    pack = Pack(
        n_rows=np.array([f.tip_distance_um.size for f in features], np.int64),
        n_features=np.array([[len(f.values[g]) for g in GROUPS] for f in features], np.int64),
        n_labels=np.array([2 if t is None else t.ids.size + 1 for t in tables], np.int64),
        n_cells=np.array([1 if t is None else t.active.shape[1] for t in tables], np.int64),
        centre=np.zeros((n, rows)),
        basis=np.zeros((n, rows, prior.dims)),
        whitener=np.zeros((*shape, rows, rows), np.float32),
        white_one=np.zeros((*shape, rows), np.float32),
        white_data=np.zeros((*shape, wide, rows), np.float32),
        square=np.zeros((*shape, wide)),
        log_scale=np.zeros(shape),
        power=np.zeros((n, g_count, wide)),
        mean=np.zeros((n, g_count, wide, labels)),
        precision=np.zeros((n, labels, labels)),
        log_covariance=np.zeros(n),
        log_null=np.zeros((*shape, wide)),
        active=np.full((n, g_count, cells, slots), -1, np.int64),
        weight=np.zeros((n, g_count, cells, slots)),
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
    for s, (feature, table) in enumerate(zip(features, tables, strict=True)):
        if table is not None:
            _fill_shank(pack, s, prior, feature, table)
    return pack


def _fill_shank(pack: Any, s: int, prior: DepthPrior, feature: FeatureSet, table: LabelTable) -> None:
    """Write one shank into the padded arrays; rows run from the surface side of the track to the tip's last."""
    r, labels = feature.tip_distance_um.size, table.ids.size + 1
    at = prior.weights(s, feature.tip_distance_um)
    pack.centre[s, :r] = at @ prior.mean_um[prior.slice(s)]
    pack.basis[s, :r] = at @ prior.basis[prior.slice(s)]
    pack.precision[s, :labels, :labels] = np.linalg.inv(table.covariance)
    pack.log_covariance[s] = np.linalg.slogdet(table.covariance)[1]
    cells = table.active.shape[1]
    pack.active[s, :, :cells] = table.active
    pack.weight[s, :, :cells] = table.weight
    pack.start[s] = table.start_um
    for g, group in enumerate(GROUPS):
        data = feature.values[group]
        k = len(data)
        pack.mean[s, g, :k, :labels] = table.mean[group].T
        pack.power[s, g, :k] = independence(data)
        for c, model in enumerate(MODELS[group]):
            noise = correlation(feature.tip_distance_um, model)
            white = whitener(noise)
            pack.whitener[s, g, c, :r, :r] = white.T
            pack.white_one[s, g, c, :r] = white.sum(axis=1)
            pack.white_data[s, g, c, :k, :r] = data @ white.T
            pack.square[s, g, c, :k] = ((data @ white.T) ** 2).sum(axis=1)
            pack.log_scale[s, g, c] = np.log(np.diag(white)).sum()
            pack.log_null[s, g, c, :k] = _flat_evidence(data, noise)


def _flat_evidence(data: FloatArray, noise: FloatArray) -> FloatArray:
    """Log evidence of features that are an intercept and noise."""
    one = np.ones((data.shape[1], 1))
    return student_evidence(data, one, noise, np.array([[1 / 0.4]]), np.zeros((1, len(data))), SHAPE, RATE)


def _log_silent(features: Sequence[FeatureSet], power: FloatArray) -> float:
    """Log evidence that no feature knows of labels: smooth noise of unknown length, averaged over lengths."""
    total = 0.0
    for s, feature in enumerate(features):
        for g, group in enumerate(GROUPS):
            data = feature.values[group]
            if not len(data):
                continue
            each = [_flat_evidence(data, correlation(feature.tip_distance_um, m)) for m in SILENT_MODELS]
            one = np.logaddexp.reduce(np.array(each), axis=0) - np.log(len(SILENT_MODELS))
            total += float(power[s, g, : len(data)] @ one)
    return total

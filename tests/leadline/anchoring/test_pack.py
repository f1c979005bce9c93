"""Evidence laid out for the kernels: what correlated features count, and odd but legal input."""

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))

import invented

from leadline.anchoring.depth_prior import build
from leadline.anchoring.knowledge import builtin
from leadline.anchoring.pack import assemble, independence
from leadline.anchoring.posterior import infer
from leadline.model.anchor import Anchor
from leadline.model.profile import Profile

RNG = np.random.default_rng(0)


def test_independent_features_count_whole_and_copies_share():
    wide = RNG.standard_normal((4, 4000))
    assert independence(wide) == 1.0
    assert independence(np.repeat(wide[:1], 4, axis=0)) == pytest.approx(1 / 4 / 0.8)
    assert independence(wide[:1]) == 1.0


def test_a_straight_feature_has_no_steps_to_compare_and_is_no_fault():
    ramp = np.linspace(-1.0, 1.0, 50)
    assert independence(np.stack([ramp, ramp, RNG.standard_normal(50)])) == 1.0


def test_a_shank_without_rows_of_its_own_is_carried_beside_its_sisters():
    mute = invented.shank(1, with_profile=False)
    packed = assemble(
        [invented.shank(), mute], build([invented.shank(), mute], builtin().depth), invented.STRUCTURES, builtin()
    )
    assert packed.informative
    assert packed.tables[1] is None
    assert packed.pack.n_rows.tolist() == [50, 0]


def test_banks_with_a_gap_and_an_anchor_far_off_the_track_are_legal():
    shank = invented.shank()
    rows = np.r_[0:40, 70:100]
    gapped = Profile(
        "A", np.zeros(rows.size, int), invented.TIP[rows], {n: v[rows] for n, v in shank.profile.features.items()}
    )
    shank = replace(
        shank, profile=gapped, tip_distance_um=invented.TIP[rows], anchors=(Anchor("A", 0, 1000.0, 30000.0, 5.0),)
    )
    found = infer([shank], invented.STRUCTURES, builtin(), draws=50)[0]
    assert found.depth_um.shape == (50, 70)
    assert np.isfinite(found.depth_um).all()
    assert any("anchor" in w or "does not speak" in w for w in found.warnings)

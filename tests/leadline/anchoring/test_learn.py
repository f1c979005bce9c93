"""A lab's own knowledge from its finished brains."""

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))

import invented

from leadline.anchoring import knowledge
from leadline.anchoring.learn import FinishedShank, learn
from leadline.base.errors import LeadlineError


def finished(brain, seed=0, sure=0.95, odd=0.0):
    shank = invented.shank(seed=seed)
    features = dict(shank.profile.features)
    depth = invented.truth(invented.TIP)
    white = invented.label(depth) == 5
    features["gamma_power_db"] = features["gamma_power_db"] + odd * white
    return FinishedShank(
        brain,
        invented.STRUCTURES,
        replace(shank.profile, features=features),
        invented.TIP,
        depth,
        invented.label(depth),
        np.full(invented.TIP.size, sure),
        shank.end_depth_um,
    )


def test_what_a_lab_sees_every_time_moves_the_type_and_helps_on_a_held_out_brain():
    learned = learn([finished(f"b{i}", seed=i, odd=4.0) for i in range(5)])
    ours = knowledge.parse(learned.text, "lab.toml")
    before = knowledge.builtin().of(invented.STRUCTURES, 5).mean["gamma_power_db"]
    assert ours.of(invented.STRUCTURES, 5).mean["gamma_power_db"] > before + 1.0
    assert learned.gain_nats > 0
    assert learned.brains == 5
    assert "white_matter" in learned.types
    assert learned.warnings == ()


def test_the_law_of_depth_is_learned_from_enough_shanks():
    few = knowledge.parse(learn([finished(f"b{i}", seed=i) for i in range(3)]).text, "x")
    many = knowledge.parse(learn([finished(f"b{i // 2}", seed=i) for i in range(8)]).text, "x")
    assert few.depth == knowledge.builtin().depth
    # every shank here misses the dye's end by 130 um, which is what is expected beforehand
    assert many.depth.offset_sd_um == pytest.approx(130.0, abs=5)
    assert many.depth.scale_sd < knowledge.builtin().depth.scale_sd


def test_a_brain_counts_once_however_many_shanks_it_has():
    once = learn([finished(f"b{i}", seed=0, odd=4.0) for i in range(3)])
    thrice = learn([finished(f"b{i // 3}", seed=0, odd=4.0) for i in range(9)])
    a, b = (knowledge.parse(x.text, "x").of(invented.STRUCTURES, 5).mean["gamma_power_db"] for x in (once, thrice))
    assert a == pytest.approx(b, abs=0.01)


def test_it_refuses_to_learn_from_too_little():
    with pytest.raises(LeadlineError, match="2 finished brains are too few"):
        learn([finished("a"), finished("b"), finished("b")])
    with pytest.raises(LeadlineError, match="only 0 structure types"):
        learn([finished(b, sure=0.6) for b in "abc"])

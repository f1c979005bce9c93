"""Places named by hand refine the registration of a run, once their file is there."""

import json

import numpy as np
import pytest
from tests.good_brain import write_good_brain

from leadline.io.brainfile import read_brain
from leadline.io.points import pairs_text
from leadline.model.transform import Affine, PointTransform, Registration
from leadline.pipeline import run as running
from leadline.pipeline.products import RegistrationFiles
from leadline.registration import stage

PLACE = np.array([[2000.0, 2500.0, 2600.0]])


@pytest.fixture
def brain(tmp_path, monkeypatch):
    shift = Affine(np.eye(3), np.full(3, 100.0))
    plain = Registration(PointTransform(shift), PointTransform(shift.inverse()), 30.0, {"local_correlation": 0.6})
    monkeypatch.setattr(stage, "register", lambda *_, **__: plain)
    return read_brain(write_good_brain(tmp_path))


def test_pairs_refine_the_registration_and_taking_them_away_undoes_it(brain):
    running.run(brain, until="register")
    assert RegistrationFiles(brain).read().stack_to_atlas(PLACE)[0, 0] == pytest.approx(2100.0)
    brain.registration_pairs.write_text(pairs_text(PLACE, PLACE + 100.0 + [[60.0, 0, 0]]))
    assert running.run(brain, until="register").done == ("register",)
    assert RegistrationFiles(brain).read().stack_to_atlas(PLACE)[0, 0] == pytest.approx(2160.0, abs=6.0)
    told = json.loads(RegistrationFiles(brain).quality.read_text())
    assert (told["pairs"], told["pairs_before_um"]) == (1, 60.0)
    assert told["pairs_after_um"] < 6.0
    assert running.run(brain, until="register").done == ()
    brain.registration_pairs.unlink()
    assert running.run(brain, until="register").done == ("register",)
    assert RegistrationFiles(brain).read().stack_to_atlas(PLACE)[0, 0] == pytest.approx(2100.0)

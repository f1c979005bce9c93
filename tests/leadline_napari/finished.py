"""A tiny brain with every product in place, made without the slow stages: what the screens are tested on."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from tests.good_brain import SHAPE, STACK_UM, entry_um, tip_um, write_good_brain

from leadline.io.brainfile import read_brain
from leadline.io.tables import anchors_text, suggestions_text
from leadline.model.anchor import Anchor, Suggestion
from leadline.model.track import Track
from leadline.model.transform import Affine, PointTransform, Registration
from leadline.pipeline import products, work
from leadline.pipeline.bench import Bench
from leadline.pipeline.exact import answer, ground

SUGGESTED = Anchor("A", 0, 600.0, 1200.0, 45.0, "upper edge of the hippocampus")


def registration() -> Registration:
    """The tiny brain's known one: stack axes run up, back to front and to the left, shifted by 150 um."""
    last = (np.array(SHAPE) * 2 - 1) * STACK_UM
    matrix = np.array([[0.0, -1, 0], [-1, 0, 0], [0, 0, -1]])
    there = PointTransform(Affine(matrix, last - 150.0))
    return Registration(there, PointTransform(there.first.inverse()), 30.0, {"note": "known"})


def tracks(found: Registration) -> list[Track]:
    """The tiny brain's one track."""
    atlas = np.linspace(entry_um(), tip_um(), 40)
    return [Track("A", 0, found.atlas_to_stack(atlas), atlas, np.full(40, 30.0), 20.0, 30.0)]


def write_finished(folder: Path, *, anchored: bool = False) -> Path:
    """Write the brain and all that a run leaves, and return its folder."""
    file = write_good_brain(folder)
    text = file.read_text()
    if not anchored:
        file.write_text(text[: text.index("[[anchor]]")])
    brain = read_brain(folder)
    bench = Bench(brain)
    found = registration()
    files = products.RegistrationFiles(brain)
    files.write(found)
    files.picture.write_bytes(b"")
    products.write_tracks(brain, tracks(found), [])
    for penetration in brain.penetrations:
        work.profile(bench, penetration, products.ProfileFiles(brain, penetration.name))
    answers = answer(bench, ground(bench, tracks(found)), brain.anchors)
    products.write_posteriors(brain, [a.posterior for a in answers])
    suggestion = Suggestion(SUGGESTED, "gamma power falls by 6 dB here", "unit density does not change")
    (brain.out / "anchors.csv").write_text(anchors_text(brain.anchors))
    (brain.out / "suggestions.csv").write_text(suggestions_text([suggestion]))
    work.locate(bench)
    return folder

"""The tiny brain of :mod:`tests.good_brain` with its results written by hand: what stands after the stages, without
running them. The truth is known, so the tables can be checked."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from scipy.stats import norm
from tests.good_brain import N_CONTACTS, SHAPE, STACK_UM, entry_um, tip_um, write_good_brain

from leadline.base.atomic import write_text
from leadline.base.fingerprint import fingerprint_path
from leadline.io.brainfile import read_brain
from leadline.io.profiles import write_profile, write_spectra
from leadline.io.tables import anchors_text, suggestions_text
from leadline.model.anchor import Anchor, Suggestion
from leadline.model.brain import Brain
from leadline.model.posterior import DepthPosterior
from leadline.model.profile import Profile
from leadline.model.spectra import Spectra
from leadline.model.track import Track
from leadline.model.transform import Affine, PointTransform, Registration
from leadline.pipeline import products, work
from leadline.pipeline.bench import Bench
from leadline.pipeline.provenance import write_provenance
from leadline.pipeline.record import Done, Record
from leadline.pipeline.run import _key, _needed, _short
from leadline.pipeline.stages import plan

TIP_DISTANCE_UM = 100.0 + 50.0 * np.arange(N_CONTACTS)
DEPTH_SD_UM = 40.0
ANCHOR = """\
[[anchor]]
penetration = "A"
tip_distance_um = 870.0
track_depth_um = 830.0
note = "white matter, upper edge"
"""
ERROR_UM = 30.0
UNIT_TABLE = "unit_id,cell_type,latency_ms,orientation_deg,region\n" + "".join(
    f"u{k},{('wide', 'narrow')[k % 2]},{20 + 3 * k},{(37 * k) % 180},mine\n" for k in range(11)
)


def write_finished_brain(folder: Path, *, name: str = "tiny-01", shift_um: float = 0.0) -> Brain:
    """The brain with ``out/`` and ``.leadline/`` as after a run; ``shift_um`` moves every contact down the track."""
    file = write_good_brain(folder)
    (folder / "a_units.csv").write_text(UNIT_TABLE)
    text = file.read_text().replace('"tiny-01"', f'"{name}"')
    text = text[: text.index("[[anchor]]")] + ANCHOR
    file.write_text(text.replace('name = "A"', 'name = "A"\nunit_table = "a_units.csv"'))
    brain = read_brain(file)
    files = products.RegistrationFiles(brain)
    files.write(registration())
    files.picture.write_bytes(b"")
    products.write_tracks(brain, [track()], ())
    products.write_posteriors(brain, [posterior(shift_um)])
    anchors = brain.anchors
    write_text(brain.out / "anchors.csv", anchors_text(anchors))
    write_text(brain.out / "suggestions.csv", suggestions_text([suggestion()]))
    _write_profile(brain)
    bench = Bench(brain)
    work.locate(bench)
    seal(brain)
    return brain


def registration() -> Registration:
    """The stack's true frame: planes grow superior, rows anterior, columns left, 150 um off on each axis."""
    last = (np.array(SHAPE) * 2 - 1) * STACK_UM - 150.0
    matrix = np.array([[0.0, -1, 0], [-1, 0, 0], [0, 0, -1]])
    affine = Affine(matrix, last)
    quality: dict[str, float | str | list[float]] = {"mask_overlap": 0.97, "jacobian_range": [0.9, 1.1]}
    return Registration(
        PointTransform(affine), PointTransform(affine.inverse()), ERROR_UM, quality, ("a <b>warning</b>",)
    )


def track() -> Track:
    """The true track, entry to tip."""
    atlas = np.linspace(entry_um(), tip_um(), 40)
    stack = registration().atlas_to_stack(atlas)
    return Track("A", 0, stack, atlas, np.full(40, 40.0), 15.0, 30.0, "points")


def posterior(shift_um: float = 0.0) -> DepthPosterior:
    """Draws about the 1:1 map that puts the tip at the track's end."""
    z = norm.ppf((np.arange(100) + 0.5) / 100)
    centre = track().length_um - TIP_DISTANCE_UM + shift_um
    return DepthPosterior("A", 0, TIP_DISTANCE_UM, centre + DEPTH_SD_UM * z[:, None], 0.8)


def suggestion() -> Suggestion:
    """One open suggestion."""
    anchor = Anchor("A", 0, 700.0, 1020.0, 35.0, "CA1 pyramidal layer", "auto")
    return Suggestion(anchor, "ripple-band power peaks here", "no spikes within 50 um")


def _write_profile(brain: Brain) -> None:
    x = TIP_DISTANCE_UM
    bump = np.exp(-0.5 * ((x - 700) / 120.0) ** 2)
    features = {
        "delta_power_db": 20 + x / 300,
        "ripple_power_db": 5 + 12 * bump,
        "unit_density_per_100um": 1 + 5 * bump,
        "spike_amplitude_uv": 60 + 40 * bump,
        "evoked_csd_ua_per_mm3": -np.gradient(bump) * 100,
    }
    profile = Profile("A", np.zeros(x.size, int), x, features)
    frequency = np.geomspace(1, 1000, 40)
    power = 1e3 / frequency[None, :] * (1 + 4 * bump[:, None])
    time = np.linspace(-0.05, 0.2, 50)
    evoked = -80 * bump[:, None] * np.exp(-0.5 * ((time - 0.06) / 0.02) ** 2)
    spectra = Spectra("A", np.zeros(x.size, int), x, frequency, power, time, evoked, evoked / 40, "flash")
    files = products.ProfileFiles(brain, "A")
    write_profile(files.table, profile)
    write_spectra(files.spectra, spectra)
    files.picture.write_bytes(b"")


def seal(brain: Brain) -> None:
    """Record every step as done, so that commands take the results as they stand."""
    record = Record(brain.folder, brain.cache)
    steps = _needed(plan(brain, record), "locate")
    for step in steps:
        inputs = {str(_short(p, brain)): fingerprint_path(p) for p in step.reads}
        outputs = {str(p.relative_to(brain.folder)): fingerprint_path(p) for p in step.gives}
        record.keep(step.name, Done(_key(step, inputs, record), outputs, (), inputs))
    write_provenance(brain, record, [s.name for s in steps])


def truth_text(brain: Brain) -> str:
    """A reference table: the channel table itself, fewer columns."""
    import pandas as pd

    table = pd.read_csv(brain.out / "channels.csv", dtype={"penetration": str})
    return table[["penetration", "channel", "track_depth_um", "region", "layer"]].to_csv(index=False)

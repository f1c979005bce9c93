"""Whether a recording contradicts its place: contacts far from the brain, the probe upside down, tracks exchanged.

The last two ask the same question: does the recording speak of the labels far more clearly if it is read another way?
Marginal likelihoods are compared (MacKay 2003, Information Theory, Inference and Learning Algorithms, chapter 28),
tempered as in the posterior and averaged over draws of the prior; anchors are left out, since they were set believing
the first reading.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np

from leadline.anchoring.depth_prior import build
from leadline.anchoring.features import GROUPS
from leadline.anchoring.noise import MODELS
from leadline.anchoring.pack import assemble
from leadline.model.profile import Profile

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.anchoring.evidence import ShankEvidence
    from leadline.anchoring.knowledge import Knowledge
    from leadline.model.atlas import Structures

POWER, DRAWS, SEED = 0.3, 2048, 1
# in log evidence: how clear another reading must be, and by how much clearer; chosen for few false alarms on invented
# tracks of other seeds than the study's
CLEAR, CLEARER = 2.0, 2.2
# common practice, no source: dye end, insertion depth and shrinkage together are seldom off by that much
ASTRAY_UM = 1000.0
BUSY = 0.5  # units per 100 um that are no stray detections


@dataclass(frozen=True, slots=True)
class Listener:
    """Says how clearly recordings speak of labels, by what is known of structures."""

    structures: Structures
    knowledge: Knowledge

    def clarity(self, shanks: Sequence[ShankEvidence]) -> float | None:
        """Log evidence that the recording of one penetration speaks of the labels along its tracks, over that of
        features that know no labels; None where it has no features."""
        from leadline.anchoring._kernels import evaluate

        plain = [replace(s, anchors=()) for s in shanks]
        prior = build(plain, self.knowledge.depth)
        packed = assemble(plain, prior, self.structures, self.knowledge)
        if not packed.informative:
            return None
        rng = np.random.default_rng(SEED)
        z, noise = prior.draw(rng, DRAWS), rng.integers(0, len(MODELS["lfp"]), (DRAWS, len(GROUPS)))
        by_group = np.empty((DRAWS, len(GROUPS)))
        evaluate(packed.pack, z, noise, by_group)
        likelihood = by_group.sum(axis=1)
        top = likelihood.max()
        mean = POWER * top + np.log(np.exp(POWER * (likelihood - top)).mean())
        return float(mean - POWER * packed.log_silent)


def upside_down(shanks: Sequence[ShankEvidence], listener: Listener) -> tuple[str, ...]:
    """A sentence where the recording of one penetration fits its tracks far better with tip and base exchanged."""
    plain, turned = listener.clarity(shanks), listener.clarity([flipped(s) for s in shanks])
    if plain is None or turned is None or not _better(turned, plain):
        return ()
    return (
        f"penetration {shanks[0].penetration}: the recording fits the structures along its track far better upside "
        f"down (log evidence {turned:.1f}, as the probe file has it {plain:.1f}): is y of the probe file the distance "
        "from the tip, and are the traces in its order? If so, correct the probe file or device_channel_indices",
    )


def flipped(shank: ShankEvidence) -> ShankEvidence:
    """The same shank with its sites in reverse order."""
    ends = float(shank.tip_distance_um[0] + shank.tip_distance_um[-1])
    turned = replace(shank, tip_distance_um=ends - shank.tip_distance_um[::-1])
    if (profile := shank.profile) is None:
        return turned
    features = {name: values[::-1] for name, values in profile.features.items()}
    tip = ends - profile.tip_distance_um[::-1]
    return replace(
        turned, profile=Profile(profile.penetration, profile.shank[::-1], tip, features, profile.flags[::-1])
    )


def exchanged(probes: Sequence[Sequence[ShankEvidence]], listener: Listener) -> tuple[str, ...]:
    """A sentence for each two penetrations (of the same shanks) whose recordings fit each other's tracks far better."""
    speaking = [p for p in probes if all(s.profile is not None for s in p)]
    own = [listener.clarity([_on(s, s) for s in p]) for p in speaking]
    out = []
    for i, j in combinations(range(len(speaking)), 2):
        a, b = speaking[i], speaking[j]
        if [s.shank for s in a] != [s.shank for s in b] or own[i] is None or own[j] is None:
            continue
        pairs = [crossed(x, y) for x, y in zip(a, b, strict=True)]
        there, back = (listener.clarity([pair[k] for pair in pairs]) for k in (0, 1))
        plain, other = (own[i] or 0.0) + (own[j] or 0.0), (there or 0.0) + (back or 0.0)
        if not _better(other, plain):
            continue
        names = f"{a[0].penetration} and {b[0].penetration}"
        out.append(
            f"penetrations {names}: each recording fits the other's track far better (log evidence {other:.1f} "
            f"exchanged, {plain:.1f} as assigned): look at which recording and which track (entry_near_um) is whose"
        )
    return tuple(out)


def crossed(a: ShankEvidence, b: ShankEvidence) -> tuple[ShankEvidence, ShankEvidence]:
    """The tracks of two shanks, each with the other's recording."""
    return _on(b, a), _on(a, b)


def _better(other: float, plain: float) -> bool:
    return other > CLEAR and other - plain > CLEARER


def _on(recorded: ShankEvidence, track: ShankEvidence) -> ShankEvidence:
    """The recording of one shank on the track of another; what was written down of either insertion is left out."""
    return replace(track, profile=recorded.profile, tip_distance_um=recorded.tip_distance_um, inserted_um=None)


def misplaced(shank: ShankEvidence) -> tuple[str, ...]:
    """Sentences where recording, insertion depth and track are about a millimetre or more apart."""
    where = f"penetration {shank.penetration}, shank {shank.shank}"
    depth = shank.end_depth_um - shank.tip_distance_um
    out = []
    if (depth < -ASTRAY_UM / 2).mean() > 0.7:
        out.append(
            f"{where}: by its track, {(depth < 0).mean():.0%} of the contacts lie above the brain; look at {_SUSPECTS}"
        )
    if shank.inserted_um is not None and abs(shank.inserted_um - shank.end_depth_um) > ASTRAY_UM:
        out.append(
            f"{where}: inserted_um is {shank.inserted_um:.0f}, its track is {shank.end_depth_um:.0f} um long: is it "
            "this penetration's track, and inserted_um in um along the shank?"
        )
    return (*out, *(f"{where}: {s}" for s in _heard_astray(shank)))


def _heard_astray(shank: ShankEvidence) -> list[str]:
    """Units far above the surface; what sounds like outside of the brain deep in it."""
    if shank.profile is None:
        return []
    depth = shank.end_depth_um - shank.profile.tip_distance_um
    density = shank.profile.features.get("unit_density_per_100um", np.zeros(depth.size))
    high = depth[density >= BUSY].min(initial=0.0)
    deep = depth[np.array([flag == "outside" for flag in shank.profile.flags], bool)].max(initial=0.0)
    out = []
    if high < -ASTRAY_UM:
        out.append(f"units are recorded {-high:.0f} um above the brain, by its track; look at {_SUSPECTS}")
    if deep > ASTRAY_UM:
        out.append(f"contacts sound as if outside the brain {deep:.0f} um below its surface; look at {_SUSPECTS}")
    return out


_SUSPECTS = "the site map (bank), at tip_offset_um and at whether recording and track are this penetration's"

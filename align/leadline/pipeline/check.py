"""``leadline check``: every input opened and looked at, all that is wrong said at once, nothing heavy computed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeVar

from leadline.base.errors import Faults, LeadlineError, nearest
from leadline.pipeline.bench import Bench

if TYPE_CHECKING:
    from collections.abc import Callable

    from leadline.model.anchor import Anchor
    from leadline.model.brain import Brain, Penetration
    from leadline.model.probe import Probe

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Findings:
    """``faults`` stop a run; ``notes`` are worth knowing."""

    faults: tuple[LeadlineError, ...]
    notes: tuple[str, ...]


def check(brain: Brain, bench: Bench | None = None) -> Findings:
    """Open and look at every input of a brain."""
    look = _Look(bench or Bench(brain))
    look.images()
    for penetration in brain.penetrations:
        look.penetration(penetration)
    look.anchors()
    look.hear(lambda: look.bench.knowledge)
    look.contradictions()
    return Findings(tuple({str(f): f for f in look.faults}.values()), tuple(look.notes))


class _Look:
    def __init__(self, bench: Bench) -> None:
        self.bench, self.brain = bench, bench.brain
        self.faults: list[LeadlineError] = []
        self.notes: list[str] = []
        self.anchors_in_force: tuple[Anchor, ...] = ()

    def hear(self, ask: Callable[[], T], about: str = "") -> T | None:
        """Call ``ask``; keep what it complains of, with the penetration it is about."""
        try:
            return ask()
        except Faults as error:
            self.faults += error.faults
        except LeadlineError as error:
            where = f"{about}: {error.where}" if about and error.where else error.where or about
            self.faults.append(LeadlineError(error.what, where=where, mend=error.mend))
        return None

    def contradictions(self) -> None:
        """What is readable and cannot be right; only asked where everything can be read."""
        from leadline.pipeline import contradictions

        if self.faults:
            return
        self.notes += contradictions.of_insertions(self.bench)
        for penetration in self.brain.penetrations:
            self.notes += contradictions.of_recordings(self.brain, penetration)
            probe = self.bench.probe(penetration)
            self.notes += contradictions.of_anchors(self.anchors_in_force, penetration, probe)
        self.notes += contradictions.without_plan(self.brain)

    def images(self) -> None:
        from leadline.atlas.laminar import require_chosen

        atlas = self.hear(lambda: self.bench.atlas)
        stack = self.hear(lambda: self.bench.background)
        self.hear(lambda: self.bench.dye)
        if atlas is not None:
            self.hear(lambda: require_chosen(self.brain.settings.locate.layer_fractions, atlas.structures))
        if atlas is not None and stack is not None:
            self.notes += _size_notes(sorted(atlas.labels.extent_um), sorted(stack.finest.extent_um))

    def penetration(self, penetration: Penetration) -> None:
        from leadline.io.units import read_unit_table

        about, unit_table = f"penetration {penetration.name}", penetration.unit_table
        if unit_table is not None:
            self.hear(lambda: read_unit_table(unit_table), about)
        probe = self.hear(lambda: self.bench.probe(penetration), about)
        if probe is None:
            return
        if not len(probe.contact_id):
            self.faults.append(
                LeadlineError(
                    "no contact of the probe was recorded",
                    where=about,
                    mend="device_channel_indices is -1 everywhere; write the trace of each contact",
                )
            )
        self._left_out(penetration, about)
        self.hear(lambda: self.bench.recordings(penetration, probe), about)
        if penetration.points is not None:
            self._points(penetration, probe, about)
        if penetration.shank_toward and len(probe.shanks) == 1:
            self.notes.append(f"{about}: shank_toward says nothing of a probe with one shank")

    def _left_out(self, penetration: Penetration, about: str) -> None:
        from leadline.io.sources import left_out

        for source, site_map in zip(penetration.recordings, self.bench.site_maps(penetration), strict=True):
            unused = left_out(source, site_map, penetration.name)
            if unused:
                self.notes.append(f"{about}: {unused}")

    def _points(self, penetration: Penetration, probe: Probe, about: str) -> None:
        from leadline.io.points import read_hand_points

        path = penetration.points
        assert path is not None
        points = self.hear(lambda: read_hand_points(path), about)
        stack = self.hear(lambda: self.bench.background)
        for shank, rows in (points or {}).items():
            if stack is not None and ((rows > stack.finest.extent_um) | (rows < -stack.finest.voxel_um)).any():
                size = ", ".join(f"{e:.0f}" for e in stack.finest.extent_um)
                self.faults.append(
                    LeadlineError(
                        f"a point of shank {shank} lies outside the stack, which reaches to {size} um",
                        where=f"{about}: {path}",
                        mend="Points are um along the stored axes, not voxels",
                    )
                )
            if shank not in probe.shanks:
                self.faults.append(
                    LeadlineError(
                        f"points name shank {shank}, the probe has {', '.join(map(str, probe.shanks))}",
                        where=f"{about}: {path}",
                        mend="Correct the shank column",
                    )
                )

    def anchors(self) -> None:
        from leadline.model.anchor import in_order
        from leadline.pipeline.in_force import anchors_in_force
        from leadline.pipeline.record import Record

        record = self.hear(lambda: Record(self.brain.folder, self.brain.cache))
        anchors = self.hear(lambda: anchors_in_force(self.brain, record)) if record is not None else None
        self.anchors_in_force = anchors or ()
        names = [p.name for p in self.brain.penetrations]
        for key in sorted({(a.penetration, a.shank) for a in anchors or ()}):
            if key[0] not in names:
                what = f"there is no penetration '{key[0]}'"
                self.faults.append(LeadlineError(what, where="anchors.csv", mend=nearest(key[0], names)))
            mine = [a for a in anchors or () if (a.penetration, a.shank) == key]
            self.hear(lambda mine=mine: in_order(mine))  # type: ignore[misc]


def _size_notes(atlas_um: list[float], stack_um: list[float]) -> list[str]:
    """Tissue swells and shrinks by some tens of per cent; a factor of two is a wrong voxel size."""
    ratio = [s / a for s, a in zip(stack_um, atlas_um, strict=True)]
    if min(ratio) < 0.5 or max(ratio) > 2.0:
        sizes = " x ".join(f"{s / 1000:.1f}" for s in stack_um)
        wanted = " x ".join(f"{a / 1000:.1f}" for a in atlas_um)
        return [f"the stack measures {sizes} mm, the atlas {wanted} mm: is voxel_um right?"]
    return []

"""The anchors in force: those of ``out/anchors.csv`` and of brain.toml, which the file repeats."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline.base.atomic import write_text

if TYPE_CHECKING:
    from collections.abc import Sequence

    from leadline.model.anchor import Anchor
    from leadline.model.brain import Brain
    from leadline.pipeline.record import Record


def anchors_in_force(brain: Brain, record: Record) -> tuple[Anchor, ...]:
    """Anchors of brain.toml and of ``out/anchors.csv``.

    The file also repeats those that brain.toml held when it was written; one that has since left brain.toml is gone.
    """
    from leadline.io.tables import read_anchors

    repeated = record.repeated_anchors - set(brain.anchors)
    kept = {a for a in read_anchors(brain.out / "anchors.csv") if a not in repeated}
    return tuple(sorted({*kept, *brain.anchors}, key=lambda a: (a.penetration, a.shank, -a.tip_distance_um)))


def write_in_force(brain: Brain, record: Record, anchors: Sequence[Anchor]) -> None:
    """Write ``out/anchors.csv``; what of it brain.toml holds is remembered first.

    Whoever is killed between the two leaves a file that is read as before: nothing accepted is lost, and nothing that
    leaves brain.toml later stays behind.
    """
    from leadline.io.tables import anchors_text

    own = set(anchors) - set(brain.anchors)
    record.remember_repeated((record.repeated_anchors | set(brain.anchors)) - own)
    write_text(brain.out / "anchors.csv", anchors_text(anchors))

"""Dye and background exchanged: the tracks then show in the channel that was called background."""

from __future__ import annotations

from typing import TYPE_CHECKING

from leadline.base.progress import SILENT, Progress
from leadline.tracing.find import trace

if TYPE_CHECKING:
    from leadline.model.settings import TraceSettings
    from leadline.model.volume import Volume


def doubts(
    dye: Volume, background: Volume, *, settings: TraceSettings | None = None, progress: Progress = SILENT
) -> tuple[str, ...]:
    """At most one sentence, about a stack whose dye channel shows no track at all: the other channel does.

    Autofluorescence is no thin straight line, so a brain without dye shows tracks in neither channel.
    """
    found = trace(background, dye, settings=settings, progress=progress)
    if not found:
        return ()
    length_um = max(t.length_um for t in found)
    one = len(found) == 1
    return (
        f"the dye channel shows no track, the background channel {len(found)} (the longest {length_um:.0f} um): are "
        f"dye and background exchanged? If {'that is a shank' if one else 'those are shanks'}, exchange dye and "
        "background (or dye_channel and background_channel) in brain.toml; the registration has to run again too",
    )

"""A brain's inputs on the bench: opened once, on first need, and handed to the steps."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from leadline.base.errors import LeadlineError
from leadline.base.progress import SILENT, Progress
from leadline.model.brain import Brain, Penetration

if TYPE_CHECKING:
    from pathlib import Path

    from leadline.anchoring.knowledge import Knowledge
    from leadline.model.anchor import Anchor
    from leadline.model.atlas import Atlas
    from leadline.model.brain import RecordingSource
    from leadline.model.probe import Probe
    from leadline.model.recording import Recording
    from leadline.model.volume import Stack, Volume

WORK_VOXELS_MAX = 200e6


@dataclass
class Bench:
    """Lazily opened inputs of one brain. Methods raise LeadlineError when an input is wrong."""

    brain: Brain
    progress: Progress = SILENT

    @cached_property
    def atlas(self) -> Atlas:
        """The atlas folder, read."""
        from leadline.pipeline.atlas_import import load_atlas

        return load_atlas(self.brain.atlas)

    @cached_property
    def background(self) -> Stack:
        """The autofluorescence channel, opened, with the resolutions of its working copy."""
        from leadline.pipeline.ingest import channels, opened

        return opened(self.brain, channels(self.brain)[0])

    @cached_property
    def dye(self) -> Stack | None:
        """The dye channel, opened like the background; None where the brain has none."""
        from leadline.pipeline.ingest import channels, opened

        _, *others = channels(self.brain)
        if not others:
            return None
        dye = opened(self.brain, others[0])
        ours, theirs = dye.finest, self.background.finest
        if ours.shape != theirs.shape or ours.code != theirs.code or not np.allclose(ours.voxel_um, theirs.voxel_um):
            raise LeadlineError(
                f"dye ({ours.shape} voxels, {ours.voxel_um.tolist()} um, {ours.code}) and background ({theirs.shape}, "
                f"{theirs.voxel_um.tolist()} um, {theirs.code}) are not on one grid",
                where=str(others[0].path),
                mend="Both channels must be of one imaging of one brain",
            )
        return dye

    def reopen(self) -> None:
        """Look at the channels anew, now that a working copy of them has been made."""
        for name in ("background", "dye"):
            self.__dict__.pop(name, None)

    def reduced(self, stack: Stack, target_um: float) -> Volume:
        """``stack`` at about ``target_um``: in memory, or read as it is sliced where it would be large there.

        Without a fitting level, it is coarser where the whole brain would not fit into memory.
        """
        from leadline.io.reduce import reduce_to
        from leadline.pipeline.ingest import SMALL_VOXELS, at_hand

        level = stack.fitting(target_um)
        needed = float(np.prod(level.extent_um / np.maximum(level.voxel_um, target_um)))
        if needed > SMALL_VOXELS and at_hand(stack, target_um):
            return level
        extent = float(np.prod(stack.finest.extent_um))
        target = max(target_um, (extent / WORK_VOXELS_MAX) ** (1 / 3))
        return reduce_to(stack.fitting(target), target, progress=self.progress)

    def probe(self, penetration: Penetration) -> Probe:
        """The contacts of a penetration that were recorded; ``channel`` counts on through site maps of recordings."""
        from leadline.io.sources import n_traces
        from leadline.model.probe import united

        if not any(source.probe for source in penetration.recordings):
            return self._common_map(penetration)
        maps: dict[tuple[Path | None, int | None], Probe] = {}
        size: dict[tuple[Path | None, int | None], int] = {}
        for source, site_map in zip(penetration.recordings, self.site_maps(penetration), strict=True):
            key = (source.probe, source.probe_index)
            maps.setdefault(key, site_map)
            size[key] = max(size.get(key, 0), n_traces(source, site_map, penetration.name))
        return united(list(maps.values()), list(size.values()))

    def site_maps(self, penetration: Penetration) -> tuple[Probe, ...]:
        """The recorded contacts of each recording, wired to its own traces."""
        common = None
        if any(source.probe is None for source in penetration.recordings):
            common = self._common_map(penetration)
        return tuple(
            common if common is not None and source.probe is None else self._own_map(penetration, source)
            for source in penetration.recordings
        )

    def _common_map(self, penetration: Penetration) -> Probe:
        """The penetration's own probe, wired to the recordings that were made through it."""
        from leadline.io.probes import is_wired, read_probe, wire
        from leadline.io.sources import wired_to

        probe = read_probe(
            penetration.probe, tip_offset_um=penetration.tip_offset_um, probe_index=penetration.probe_index
        )
        for source in penetration.recordings:
            if source.lfp is not None and source.probe is None:
                probe = wired_to(source, probe, penetration.name)
        return (probe if is_wired(probe) else wire(probe, len(probe.contact_id))).recorded

    def _own_map(self, penetration: Penetration, source: RecordingSource) -> Probe:
        from leadline.io.probes import is_wired, read_probe, read_shank_names, wire
        from leadline.io.sources import wired_to

        assert source.probe is not None
        probe = read_probe(
            source.probe,
            tip_offset_um=penetration.tip_offset_um,
            probe_index=source.probe_index,
            shank_names=read_shank_names(penetration.probe, probe_index=penetration.probe_index),
        )
        if source.lfp is not None:
            probe = wired_to(source, probe, penetration.name)
        return (probe if is_wired(probe) else wire(probe, len(probe.contact_id))).recorded

    def recordings(self, penetration: Penetration, probe: Probe) -> tuple[Recording, ...]:
        """The recordings of a penetration: traces opened, spikes, events and exclusions read.

        ``probe`` : what :meth:`probe` gives.
        """
        from leadline.io.sources import open_recording

        own = any(source.probe for source in penetration.recordings)
        maps = self.site_maps(penetration) if own else (probe,) * len(penetration.recordings)
        return tuple(
            open_recording(source, site_map, penetration.name, f"{penetration.name}, recording {number}", own=own)
            for number, (source, site_map) in enumerate(zip(penetration.recordings, maps, strict=True), 1)
        )

    @cached_property
    def knowledge(self) -> Knowledge:
        """What is known of structure types: the built-in table, with the lab's own where there is one."""
        from leadline.anchoring import knowledge

        if self.brain.knowledge is None:
            return knowledge.builtin()
        try:
            text = self.brain.knowledge.read_text(encoding="utf-8")
        except UnicodeDecodeError as error:
            where = str(self.brain.knowledge)
            raise LeadlineError(f"is not UTF-8 text ({error.reason})", where=where, mend="Save it as UTF-8") from error
        return knowledge.parse(text, str(self.brain.knowledge))

    @cached_property
    def anchors_file_rows(self) -> tuple[Anchor, ...]:
        """What ``out/anchors.csv`` holds now."""
        from leadline.io.tables import read_anchors

        return read_anchors(self.brain.out / "anchors.csv")

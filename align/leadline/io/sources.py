"""Opens the recordings of a penetration, flat files and tables or NWB alike."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from leadline.io.nwb import is_nwb
from leadline.model.probe import NOT_RECORDED
from leadline.model.recording import Recording

if TYPE_CHECKING:
    from leadline.model.brain import RecordingSource
    from leadline.model.probe import Probe
    from leadline.model.recording import Traces


def open_source(source: RecordingSource, probe: Probe, group: str) -> Traces:
    """The traces of a recording, opened; ``probe`` and ``group`` (the penetration's name) find electrodes in NWB."""
    if is_nwb(source.lfp):
        from leadline.io.nwb import open_nwb

        assert source.lfp is not None
        return open_nwb(source.lfp, probe, group, source.lfp_series)
    from leadline.io.recordings import open_traces

    return open_traces(source)


def wired_to(source: RecordingSource, probe: Probe, group: str) -> Probe:
    """The probe wired to a recording; contacts of which an NWB file has no electrode count as not recorded."""
    from leadline.io.nwb import NwbTraces
    from leadline.io.probes import wire

    traces = open_source(source, probe, group)
    if not isinstance(traces, NwbTraces):
        return wire(probe, traces.n_channels, source.skip_channels)
    wired = wire(probe, traces.n_channels)
    there = wired.channel != NOT_RECORDED
    there[there] &= ~traces.absent(wired.channel[there])
    return replace(wired, channel=np.where(there, wired.channel, NOT_RECORDED))


def left_out(source: RecordingSource, probe: Probe, group: str) -> str:
    """What of a recording is not used, in words; '' where all of it is. ``probe`` is wired."""
    from leadline.io.probes import in_words, unreferenced

    if source.lfp is None or is_nwb(source.lfp):
        return ""
    idle = unreferenced(probe, open_source(source, probe, group).n_channels, source.skip_channels)
    return f"traces {in_words(idle)} of {source.lfp.name} are no contact, left out" if idle.size else ""


def n_traces(source: RecordingSource, probe: Probe, group: str) -> int:
    """How many traces a recording has; without samples, as many as its wired ``probe`` needs."""
    if source.lfp is None:
        return int(probe.channel.max(initial=-1)) + 1
    return open_source(source, probe, group).n_channels


def open_recording(source: RecordingSource, probe: Probe, group: str, name: str, *, own: bool = False) -> Recording:
    """A recording of a wired probe: traces opened; spikes, events and excluded intervals read.

    ``own`` : whether the penetration holds other contacts too, so that the recording has to carry its own.
    """
    from leadline.io import nwb, spikes

    sorted_spikes = events = None
    excluded, lfp = np.zeros((0, 2)), (group, source.lfp_series)
    if source.spikes is not None:
        in_nwb = is_nwb(source.spikes)
        sorted_spikes = (
            nwb.read_nwb_spikes(source.spikes, probe, *lfp) if in_nwb else spikes.read_spikes(source.spikes, probe)
        )
    if source.events is not None:
        in_nwb = is_nwb(source.events)
        events = nwb.read_nwb_events(source.events, *lfp) if in_nwb else spikes.read_events(source.events)
    if source.exclude is not None:
        in_nwb = is_nwb(source.exclude)
        excluded = nwb.read_nwb_excluded(source.exclude, *lfp) if in_nwb else spikes.read_excluded(source.exclude)
    return Recording(
        traces=open_source(source, probe, group) if source.lfp is not None else None,
        spikes=sorted_spikes,
        events=events,
        excluded_s=excluded,
        name=name,
        probe=probe if own else None,
    )

"""What was recorded in a penetration: handles that read on demand, and spikes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from leadline.base.arrays import AnyArray, Float32Array, FloatArray, IntArray, frozen, frozen_vector
from leadline.base.errors import LeadlineError
from leadline.model.probe import Probe


class Traces(Protocol):
    """Samples of a recording, time-major; reads only what is asked for."""

    @property
    def sampling_hz(self) -> float:
        """Samples a second."""

    @property
    def n_samples(self) -> int:
        """Number of samples of each trace."""

    @property
    def n_channels(self) -> int:
        """Number of traces, contacts or not."""

    def read_uv(self, start: int, stop: int, channels: IntArray) -> Float32Array:
        """Samples ``[start, stop)`` of ``channels``, ``(stop - start, len(channels))`` in microvolts."""


@dataclass(frozen=True, slots=True, eq=False)
class Spikes:
    """Sorted or detected spikes, one row each.

    ``time_s`` : (n,). ``unit_id`` : (n,) integers into ``unit_names``. ``tip_distance_um`` : (n,). ``shank`` : (n,).
    ``amplitude_uv``, ``width_s`` : (n,) or None where not given.
    """

    time_s: FloatArray
    unit_id: IntArray
    tip_distance_um: FloatArray
    shank: IntArray
    unit_names: tuple[str, ...]
    amplitude_uv: FloatArray | None = None
    width_s: FloatArray | None = None

    def __post_init__(self) -> None:
        n = len(self.time_s)
        object.__setattr__(self, "time_s", frozen_vector(self.time_s, "time_s"))
        object.__setattr__(self, "tip_distance_um", frozen_vector(self.tip_distance_um, "tip_distance_um", length=n))
        for name in ("unit_id", "shank"):
            column: AnyArray = frozen(getattr(self, name), np.int64)
            if column.shape != (n,):
                raise LeadlineError(f"{name} has {column.shape} rows for {n} spikes", where="spikes")
            object.__setattr__(self, name, column)
        for name in ("amplitude_uv", "width_s"):
            values = getattr(self, name)
            if values is not None:
                object.__setattr__(self, name, frozen_vector(values, name, length=n, finite=False))


@dataclass(frozen=True, slots=True, eq=False)
class Events:
    """Stimuli: ``time_s`` (n,) and a ``kind`` for each."""

    time_s: FloatArray
    kind: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Recording:
    """One recording of a penetration. ``excluded_s`` : (k, 2) start and stop of intervals left out.

    ``probe`` : the contacts that it was recorded through, where they are not the penetration's.
    """

    traces: Traces | None
    spikes: Spikes | None = None
    events: Events | None = None
    excluded_s: FloatArray = None  # type: ignore[assignment]
    name: str = ""
    probe: Probe | None = None

    def __post_init__(self) -> None:
        spans = np.zeros((0, 2)) if self.excluded_s is None else self.excluded_s
        object.__setattr__(self, "excluded_s", frozen(spans))

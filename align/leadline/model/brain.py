"""What a user wrote in ``brain.toml``, checked, paths made whole, nothing read yet."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

from leadline.model.anchor import Anchor
from leadline.model.settings import Settings


@dataclass(frozen=True, slots=True)
class StackSource:
    """Where the two image channels are. ``voxel_um`` and ``code`` only where the user wrote them."""

    background: Path
    dye: Path | None = None
    background_channel: int = 0
    dye_channel: int = 0
    voxel_um: tuple[float, float, float] | None = None
    code: str | None = None


@dataclass(frozen=True, slots=True)
class RecordingSource:
    """Where one recording's files are; a key is None where the user gave none.

    ``lfp_series`` : which electrical series of an NWB file that holds several of one electrode group. ``probe``,
    ``probe_index`` : its own site map, where it was not recorded through the penetration's.
    """

    lfp: Path | None = None
    sampling_hz: float | None = None
    n_channels: int | None = None
    dtype: str | None = None
    uv_per_bit: float | None = None
    spikes: Path | None = None
    events: Path | None = None
    exclude: Path | None = None
    skip_channels: tuple[int, ...] = ()
    lfp_series: str | None = None
    probe: Path | None = None
    probe_index: int | None = None


@dataclass(frozen=True, slots=True)
class Penetration:
    """One insertion of one probe. ``probe_index`` : which probe of a file of several."""

    name: str
    probe: Path
    tip_offset_um: float = 0.0
    entry_near_um: tuple[float, float, float] | None = None
    points: Path | None = None
    inserted_um: float | None = None
    shank_toward: str | None = None
    unit_table: Path | None = None
    recordings: tuple[RecordingSource, ...] = ()
    probe_index: int | None = None


@dataclass(frozen=True, slots=True)
class Brain:
    """One animal, as described by ``file``; ``anchors`` are those of brain.toml alone."""

    file: Path
    name: str
    atlas: Path
    stack: StackSource
    penetrations: tuple[Penetration, ...]
    anchors: tuple[Anchor, ...] = ()
    knowledge: Path | None = None
    settings: Settings = field(default_factory=Settings)

    @property
    def folder(self) -> Path:
        """The folder of brain.toml."""
        return self.file.parent

    @property
    def out(self) -> Path:
        """Where results go."""
        return self.folder / "out"

    @property
    def cache(self) -> Path:
        """Where intermediate results and the record of what has been done are kept."""
        return self.folder / ".leadline"

    @property
    def track_edits(self) -> Path:
        """Tracks drawn or corrected on the screen; they stand above the dye and above ``points``."""
        return self.folder / "track_edits.csv"

    @property
    def registration_pairs(self) -> Path:
        """Places named in stack and atlas by a person, who accepted that they refine the registration."""
        return self.folder / "registration_pairs.csv"

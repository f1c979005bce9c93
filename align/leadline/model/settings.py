"""What a user may change of each stage, with defaults that fit most brains: ``[settings.STAGE]`` of brain.toml."""

from __future__ import annotations

from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True)
class RegisterSettings:
    """``[settings.register]``. ``resolution_um`` : grid of the finest level."""

    resolution_um: float = 100.0
    deformable: bool = True
    search_orientation: bool = True


@dataclass(frozen=True, slots=True)
class TraceSettings:
    """``[settings.trace]``. ``sensitivity`` : 1 is usual; more finds fainter tracks and more that are none."""

    resolution_um: float = 10.0
    sensitivity: float = 1.0
    min_length_um: float = 1000.0


@dataclass(frozen=True, slots=True)
class ProfileSettings:
    """``[settings.profile]``. Bands in Hz; sources of the defaults stand in the README."""

    delta_hz: tuple[float, float] = (0.5, 4.0)
    theta_hz: tuple[float, float] = (4.0, 12.0)
    gamma_hz: tuple[float, float] = (30.0, 90.0)
    ripple_hz: tuple[float, float] = (140.0, 220.0)
    high_frequency_hz: tuple[float, float] = (300.0, 1000.0)
    mains_hz: float = 50.0
    fraction: float = 1.0
    event_window_s: tuple[float, float] = (-0.1, 0.3)


@dataclass(frozen=True, slots=True)
class AnchorSettings:
    """``[settings.anchor]``. ``seed`` fixes the draws; the same seed gives the same bytes."""

    physiology: bool = True
    seed: int = 1
    draws: int = 400
    suggestions: int = 5


@dataclass(frozen=True, slots=True)
class LocateSettings:
    """``[settings.locate]``. ``layer_fractions`` : (acronym of a structure without layers, name of a published set)."""

    seed: int = 1
    layer_fractions: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True, slots=True)
class Settings:
    """All stages' settings."""

    register: RegisterSettings = field(default_factory=RegisterSettings)
    trace: TraceSettings = field(default_factory=TraceSettings)
    profile: ProfileSettings = field(default_factory=ProfileSettings)
    anchor: AnchorSettings = field(default_factory=AnchorSettings)
    locate: LocateSettings = field(default_factory=LocateSettings)

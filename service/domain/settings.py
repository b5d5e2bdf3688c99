"""What the user may say about a flight: aircraft, probe, windows, thresholds. All optional."""

from collections.abc import Mapping
from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True)
class Configuration:
    """One configuration of the aircraft (flaps, gear, payload) and its stall speed.

    Either `stall_speed_mps` (CAS at 1 g and the reference mass) or `wing_area_m2` with `lift_coefficient_max`.
    """

    name: str
    stall_speed_mps: float | None = None
    stall_speed_uncertainty_mps: float | None = None
    wing_area_m2: float | None = None
    lift_coefficient_max: float | None = None


@dataclass(frozen=True, slots=True)
class Aircraft:
    reference_mass_kg: float | None = None
    mass_kg: float | None = None
    mass_uncertainty_kg: float | None = None
    maximum_bank_deg: float | None = None
    configurations: tuple[Configuration, ...] = ()


@dataclass(frozen=True, slots=True)
class ConfigurationTime:
    """From `start_s` on the configuration `name` is in force."""

    start_s: float
    name: str


@dataclass(frozen=True, slots=True)
class ProbeSettings:
    zero_offset_pa: float | None = None
    zero_offset_uncertainty_pa: float | None = None
    applied_speed_scale: float = 1.0
    nominal_pressure_scale: float = 1.0
    full_scale_pa: float | None = None


@dataclass(frozen=True, slots=True)
class Window:
    start_s: float
    end_s: float


@dataclass(frozen=True, slots=True)
class WarningSettings:
    """Stall-margin thresholds (CAS / stall speed - 1) and the time a level is held."""

    caution_below: float = 0.3
    warning_below: float = 0.1
    hold_s: float = 0.5


@dataclass(frozen=True, slots=True)
class ColumnMeaning:
    """What a foreign CSV column holds: a glossary name (unit suffix optional) and the unit it is written in."""

    quantity: str
    unit: str | None = None


@dataclass(frozen=True, slots=True)
class Settings:
    aircraft: Aircraft = field(default_factory=Aircraft)
    configuration_times: tuple[ConfigurationTime, ...] = ()
    probe: ProbeSettings = field(default_factory=ProbeSettings)
    loiters: tuple[Window, ...] = ()
    warnings: WarningSettings = field(default_factory=WarningSettings)
    columns: Mapping[str, ColumnMeaning] = field(default_factory=dict)

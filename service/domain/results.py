"""Frozen records that the steps of a reduction hand on, and the whole answer.

Every field is always there; None means "could not be made", documented where it may happen. Arrays of one record share
their length n. All speeds m/s, pressures Pa, times s on the log's axis, angles in degrees.
"""

from dataclasses import dataclass
from datetime import datetime

import numpy as np

from service.domain.arrays import BoolArray, FlagArray, FloatArray
from service.domain.codes import Direction, FaultKind, Level, LogFormat, Reason, Verdict, ZeroOffsetSource
from service.domain.log import SensorNote


@dataclass(frozen=True, slots=True)
class Estimate:
    """A value with its standard uncertainty and 95 % interval (GUM terms)."""

    value: float
    standard_uncertainty: float
    interval_95: tuple[float, float]


@dataclass(frozen=True, slots=True)
class AirDataSeries:
    """Everything the reduction needs, on the probe's own times (n samples); GPS keeps its own times (m samples).

    Static pressure and temperature are always there: measured, or the standard atmosphere at the GPS altitude, as the
    sources and `standard_*` say.
    """

    time_s: FloatArray
    reading_pa: FloatArray
    """Total minus static as read. NaN where missing."""
    reordered: BoolArray
    """(n,) samples that stood behind later ones in the source."""
    static_pressure_pa: FloatArray
    air_temperature_k: FloatArray
    """The virtual temperature where humidity is known."""
    temperature_uncertainty_k: float
    static_uncertainty_pa: float
    altitude_m: FloatArray
    """Above mean sea level at the probe's times (GPS, else pressure altitude); NaN where unknown."""
    on_ground: BoolArray
    """(n,) standing or rolling: not airborne."""
    at_rest: BoolArray
    """(n,) standing still on the ground, fit to read the zero offset."""
    gps_time_s: FloatArray
    velocity_north_mps: FloatArray
    velocity_east_mps: FloatArray
    velocity_down_mps: FloatArray
    """(m,) zeros where the source gives none: see `has_velocity_down`."""
    has_velocity_down: bool
    gps_altitude_m: FloatArray
    """(m,) NaN where unknown."""
    gps_on_ground: BoolArray
    compensated_zero: bool
    standard_static: bool
    standard_temperature: bool
    probe_source: str
    static_source: str
    temperature_source: str


@dataclass(frozen=True, slots=True)
class Fault:
    fault: FaultKind
    sensor: str
    start_s: float
    end_s: float
    message: str


@dataclass(frozen=True, slots=True)
class FaultReport:
    """Faults with their spans, and the probe samples that must stay out of the fit."""

    faults: tuple[Fault, ...]
    probe_faulty: BoolArray
    """(n,) of the series."""
    static_faulty: BoolArray
    """(n,) of the series."""


@dataclass(frozen=True, slots=True)
class Loiter:
    """A span of flight that serves the fit: circles one way round, or a pattern of legs (`straight`)."""

    start_s: float
    end_s: float
    turns: float
    direction: Direction
    heading_coverage_deg: float
    true_airspeed_mps: float
    used: bool


@dataclass(frozen=True, slots=True)
class WindEstimate:
    """Velocity of the air mass (it blows towards); `from_deg` is where it comes from, None when meaningless."""

    north_mps: Estimate
    east_mps: Estimate
    speed_mps: Estimate
    from_deg: Estimate | None


@dataclass(frozen=True, slots=True)
class LoiterWind:
    loiter: int
    altitude_m: float
    """NaN where unknown."""
    wind: WindEstimate


@dataclass(frozen=True, slots=True)
class ReasonGiven:
    code: Reason
    message: str


@dataclass(frozen=True, slots=True)
class Calibration:
    """Estimates are None when refused, except where a single one cannot be made."""

    verdict: Verdict
    reasons: tuple[ReasonGiven, ...]
    speed_scale: Estimate | None
    pressure_scale: Estimate | None
    total_speed_scale: Estimate | None
    accepted_half_width: float
    zero_offset_pa: Estimate | None
    zero_offset_source: ZeroOffsetSource
    gps_delay_s: Estimate | None
    airspeed_range_mps: tuple[float, float] | None
    """CAS, slowest and fastest of the fitted points."""
    gust_mps: float | None
    residual_rms_mps: float | None


@dataclass(frozen=True, slots=True)
class CorrectedSeries:
    """Airspeeds at the probe's own times, each (n,); standard uncertainties [m/s]; flags are bit masks of `Flag`."""

    time_s: FloatArray
    indicated_mps: FloatArray
    calibrated_mps: FloatArray
    equivalent_mps: FloatArray
    true_mps: FloatArray
    calibrated_standard_uncertainty_mps: FloatArray
    true_standard_uncertainty_mps: FloatArray
    flags: FlagArray


@dataclass(frozen=True, slots=True)
class LoadFactorSeries:
    """Normal load factor at the probe's times, each (n,); NaN where nothing tells. [1]"""

    load_factor: FloatArray
    standard_uncertainty: FloatArray
    assumed: BoolArray
    """Not measured: taken for the maximum bank, the worst case."""
    source: str
    """In plain words; `none` where no source had a value."""


@dataclass(frozen=True, slots=True)
class StallMargins:
    """Margin = CAS / stall speed - 1, each (n,); NaN on the ground and while refused."""

    time_s: FloatArray
    load_factor: FloatArray
    stall_speed_mps: FloatArray
    margin: FloatArray
    margin_lower_95: FloatArray
    indicated_margin: FloatArray
    flags: FlagArray
    load_factor_source: str


@dataclass(frozen=True, slots=True)
class StallWarning:
    level: Level
    start_s: float
    end_s: float
    minimum_margin: float
    minimum_margin_lower_95: float
    indicated_margin: float
    """What the uncorrected reading showed at the instant of the minimum."""
    load_factor: float
    configuration: str
    message: str


@dataclass(frozen=True, slots=True)
class Inputs:
    format: LogFormat
    start_utc: datetime | None
    duration_s: float
    samples: dict[str, int]
    truncated: bool
    sha256: str
    probe_source: str | None
    static_source: str | None
    temperature_source: str | None
    load_factor_source: str | None
    sensors: tuple[SensorNote, ...]


@dataclass(frozen=True, slots=True)
class Reduction:
    """The whole answer. `stall_margins` is None without a stall speed, and `stall_margins_absent` says why."""

    calibration: Calibration
    wind: WindEstimate | None
    wind_by_loiter: tuple[LoiterWind, ...]
    loiters: tuple[Loiter, ...]
    airspeed: CorrectedSeries | None
    """None without a probe."""
    stall_margins: StallMargins | None
    stall_margins_absent: str | None
    stall_warnings: tuple[StallWarning, ...]
    faults: tuple[Fault, ...]
    inputs: Inputs


def nan_array(length: int) -> FloatArray:
    """(length,) of NaN."""
    return np.full(length, np.nan)


@dataclass(frozen=True, slots=True)
class ZeroOffset:
    """What is known of the zero before the fit: a prior with its source.

    `rectangular`: all values within the square root of 3 standard uncertainties are alike, none beyond.
    """

    value_pa: float
    standard_uncertainty_pa: float
    source: ZeroOffsetSource
    rectangular: bool = False


@dataclass(frozen=True, slots=True)
class FittedPoints:
    """Block averages that the fit worked on, each (k,)."""

    time_s: FloatArray
    loiter: FloatArray
    """Index into the loiters, as float64 whole numbers."""
    heading_deg: FloatArray
    """Of the air velocity, clockwise from north."""
    probe_true_airspeed_mps: FloatArray
    """From the corrected reading."""
    wind_corrected_speed_mps: FloatArray
    """|ground velocity - wind|."""


@dataclass(frozen=True, slots=True)
class FitResult:
    """Scale and wind with the covariance that respects correlated gusts.

    `covariance` is (2, 2), of (ln pressure scale, zero offset [Pa]); `coverage_factor_95` times a standard uncertainty
    is the half width of a 95 % interval (above 1.96 where little data speak).
    """

    converged: bool
    pressure_scale: float
    zero_offset_pa: float
    covariance: FloatArray
    log_density_uncertainty: float
    """Share of the density in the uncertainty of ln K. It stays out of the true airspeed, whose scale was found with
    the same density against the GPS: there the two errors cancel."""
    coverage_factor_95: float
    zero_offset_source: ZeroOffsetSource
    gps_delay_s: Estimate | None
    wind: WindEstimate
    wind_by_loiter: tuple[LoiterWind, ...]
    true_airspeed_by_loiter_mps: tuple[float, ...]
    heading_coverage_deg: float
    airspeed_range_mps: tuple[float, float]
    loiters_agree: float
    """Chance that loiters of one scale scatter at least as much as these. [1]"""
    gust_mps: float
    residual_rms_mps: float
    points: FittedPoints

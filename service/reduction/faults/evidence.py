"""What the checks look at: the readings, when the aircraft flew, what the zero is, what GPS says of the airspeed."""

from dataclasses import dataclass, replace

import numpy as np
from scipy.ndimage import maximum_filter1d, minimum_filter1d

from service.airdata.pitot import impact_pressure_from_true_airspeed
from service.domain.arrays import BoolArray, FloatArray
from service.domain.log import ReadingGap, SensorNote, StaticSamples
from service.domain.results import AirDataSeries
from service.reduction.faults.rough_wind import speed_through_air

MOVING_MPS = 3.0
MOVING_WITHIN_S = 5.0
FEWEST_REST_SAMPLES = 5
LARGEST_PA, LARGEST_K, LARGEST_MPS, LARGEST_M = 1e7, 1e4, 1e4, 1e6
COMPENSATED_ZERO_UNCERTAINTY_PA = 1.0
"""Spread of the zero of a sensor that was zeroed (the design notes' prior)."""
REST_ZERO_UNCERTAINTY_PA = 2.0
"""Of a zero read at rest: wind of 2 m/s may blow into the probe."""


@dataclass(frozen=True, slots=True)
class KnownZero:
    value_pa: float
    standard_uncertainty_pa: float


@dataclass(frozen=True, slots=True)
class FlightEvidence:
    """Arrays (n,) on the probe's times."""

    series: AirDataSeries
    reading_pa: FloatArray
    """NaN where missing and where an earlier check has claimed the sample."""
    interval_s: float
    """Median interval of the probe's samples."""
    airborne: BoolArray
    moving: BoolArray
    """Airborne, and moving over the ground but for some seconds against a strong wind: a landed aircraft is not."""
    expected_pa: FloatArray
    """Dynamic pressure by GPS and a rough wind; without circles by ground speed alone. NaN without GPS."""
    wind_known: bool
    """False where `expected_pa` is by ground speed alone."""
    zero: KnownZero | None
    """None for a raw sensor without rest."""
    static: StaticSamples | None
    log_gaps: tuple[ReadingGap, ...]
    sensors: tuple[SensorNote, ...]
    full_scale_pa: float | None

    def without(self, claimed: BoolArray) -> "FlightEvidence":
        """The same flight with the readings of `claimed` (n,) taken out."""
        return replace(self, reading_pa=np.where(claimed, np.nan, self.reading_pa))


def gather_evidence(
    series: AirDataSeries,
    static: StaticSamples | None,
    log_gaps: tuple[ReadingGap, ...],
    sensors: tuple[SensorNote, ...],
    full_scale_pa: float | None,
    given_zero_pa: float | None,
) -> FlightEvidence:
    """Everything that the checks share, computed once."""
    series = _within_reason(series)
    if static is not None:
        pressure_pa = np.clip(static.static_pressure_pa, -LARGEST_PA, LARGEST_PA)
        static = replace(static, static_pressure_pa=pressure_pa)
    airborne = ~series.on_ground
    speed, wind_known = speed_through_air(series)

    return FlightEvidence(
        series=series,
        reading_pa=series.reading_pa,
        interval_s=float(np.median(np.diff(series.time_s))) if series.time_s.size > 1 else 1.0,
        airborne=airborne,
        moving=airborne & _moves(series),
        expected_pa=impact_pressure_from_true_airspeed(speed, series.static_pressure_pa, series.air_temperature_k),
        wind_known=wind_known,
        zero=known_zero(series, given_zero_pa),
        static=static,
        log_gaps=log_gaps,
        sensors=sensors,
        full_scale_pa=full_scale_pa,
    )


def _within_reason(series: AirDataSeries) -> AirDataSeries:
    """The series with numbers that no flight can hold cut to some that can be squared; spikes stay spikes."""
    return replace(
        series,
        reading_pa=np.clip(series.reading_pa, -LARGEST_PA, LARGEST_PA),
        static_pressure_pa=np.clip(series.static_pressure_pa, 1.0, LARGEST_PA),
        air_temperature_k=np.clip(series.air_temperature_k, 1.0, LARGEST_K),
        velocity_north_mps=np.clip(series.velocity_north_mps, -LARGEST_MPS, LARGEST_MPS),
        velocity_east_mps=np.clip(series.velocity_east_mps, -LARGEST_MPS, LARGEST_MPS),
        gps_altitude_m=np.clip(series.gps_altitude_m, -LARGEST_M, LARGEST_M),
    )


def _moves(series: AirDataSeries) -> BoolArray:
    time_s = series.gps_time_s
    if time_s.size < 2:
        return np.zeros(series.time_s.size, dtype=bool)
    ground_speed = np.hypot(series.velocity_north_mps, series.velocity_east_mps)
    width = 2 * max(round(MOVING_WITHIN_S / max(float(np.median(np.diff(time_s))), 1e-3)), 1) + 1
    # A closing: fills slow stretches between fast ones, but reaches not beyond the last of them.
    closed = minimum_filter1d(maximum_filter1d(ground_speed, width, mode="nearest"), width, mode="nearest")
    return np.asarray(np.interp(series.time_s, time_s, closed) > MOVING_MPS)


def known_zero(series: AirDataSeries, given_pa: float | None) -> KnownZero | None:
    """What is known of the zero without a fit: given before read at rest before compensated. None for a raw sensor."""
    if given_pa is not None:
        return KnownZero(given_pa, COMPENSATED_ZERO_UNCERTAINTY_PA)
    rest = series.reading_pa[series.at_rest]
    rest = rest[np.isfinite(rest)]
    if rest.size >= FEWEST_REST_SAMPLES:
        return KnownZero(float(np.median(rest)), REST_ZERO_UNCERTAINTY_PA)
    return KnownZero(0.0, COMPENSATED_ZERO_UNCERTAINTY_PA) if series.compensated_zero else None

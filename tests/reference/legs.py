"""Flights of straight legs made from worked examples: constant ground velocity and reading on each, joined abruptly."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.airdata.atmosphere import standard_pressure_from_altitude, standard_temperature_from_altitude
from service.airdata.pitot import impact_pressure_from_true_airspeed
from service.domain.arrays import FloatArray, IntArray
from service.domain.codes import LogFormat, ZeroOffsetSource
from service.domain.log import DecodedLog, GpsSamples, ProbeSamples, StaticSamples, TemperatureSamples
from service.domain.results import AirDataSeries, FitResult, Reduction
from service.domain.settings import ProbeSettings, Settings
from service.pipeline import reduce_flight
from service.reduction.fit import DelayPrior, OffsetPrior, PreliminaryFit, fit_scale_and_wind, preliminary_fit
from service.reduction.loiters import find_loiters
from service.reduction.series import build_series

KNOT_MPS = 1852.0 / 3600.0
WANDER_SHARE = 0.006
"""Amplitude of the reading's wander on each leg, in whole waves, so that its mean is the example's: air never stands
still, and a reading without any gust is rightly taken for a blocked probe."""
WAVE_S = 9.0
PROBE_HZ = 20.0
STILL_AIR_ZERO = Settings(probe=ProbeSettings(zero_offset_pa=0.0, zero_offset_uncertainty_pa=1e-3))


@dataclass(frozen=True, slots=True)
class Leg:
    """Ground velocity [m/s], and the reading of the probe. [Pa]"""

    velocity_north_mps: float
    velocity_east_mps: float
    reading_pa: float


def leg_on_track(ground_speed_mps: float, track_deg: float, reading_pa: float) -> Leg:
    angle = np.radians(track_deg)
    return Leg(float(ground_speed_mps * np.cos(angle)), float(ground_speed_mps * np.sin(angle)), reading_pa)


def standard_reading(true_airspeed_mps: float, altitude_m: float, pressure_scale: float = 1.0) -> float:
    """Reading at a true airspeed in the standard atmosphere. [Pa]"""
    pressure = standard_pressure_from_altitude(altitude_m)
    temperature = standard_temperature_from_altitude(altitude_m)
    return float(impact_pressure_from_true_airspeed(true_airspeed_mps, pressure, temperature)) / pressure_scale


def log_of_legs(
    legs: Sequence[Leg],
    altitude_m: float = 0.0,
    leg_s: float = 45.0,
    gps_hz: float = 5.0,
    wander_share: float = WANDER_SHARE,
) -> DecodedLog:
    """The legs one after another in the standard atmosphere at one altitude, without noise."""
    probe_s, probe_leg = _times(len(legs), leg_s, PROBE_HZ)
    gps_s, gps_leg = _times(len(legs), leg_s, gps_hz)
    waves = max(round(leg_s / WAVE_S), 1)
    wander = 1.0 + wander_share * np.sin(2.0 * np.pi * waves * probe_s / leg_s)
    reading = np.array([leg.reading_pa for leg in legs])[probe_leg]
    static_pa = np.full(probe_s.size, standard_pressure_from_altitude(altitude_m))
    temperature_k = np.full(probe_s.size, standard_temperature_from_altitude(altitude_m))
    return DecodedLog(
        format=LogFormat.BATCH,
        sha256="0" * 64,
        start_utc=None,
        truncated=False,
        time_steps_back=0,
        probe=ProbeSamples(probe_s, reading * wander, "probe"),
        static=StaticSamples(probe_s, static_pa, "static"),
        temperature=TemperatureSamples(probe_s, temperature_k, None, "thermometer", 0.01),
        gps=GpsSamples(
            time_s=gps_s,
            velocity_north_mps=np.array([leg.velocity_north_mps for leg in legs])[gps_leg],
            velocity_east_mps=np.array([leg.velocity_east_mps for leg in legs])[gps_leg],
            velocity_down_mps=np.zeros(gps_s.size),
            latitude_deg=None,
            longitude_deg=None,
            altitude_m=np.full(gps_s.size, altitude_m),
            speed_uncertainty_mps=None,
            source="GPS",
        ),
        attitude=None,
        load_factor=None,
        ground_contact=None,
    )


def _times(legs: int, leg_s: float, rate_hz: float) -> tuple[FloatArray, IntArray]:
    """Sample times, the same on every leg and about its middle, and the leg of each."""
    each = round(leg_s * rate_hz)
    index = np.arange(each * legs, dtype=np.int64)
    return np.asarray((index + 0.5) / rate_hz, dtype=np.float64), index // each


def reduce_legs(legs: Sequence[Leg], altitude_m: float = 0.0, leg_s: float = 45.0) -> Reduction:
    """Answer of the service, the zero offset given as 0."""
    return reduce_flight(log_of_legs(legs, altitude_m, leg_s), STILL_AIR_ZERO)


def fit_legs(log: DecodedLog) -> FitResult:
    """Answer of the fit alone, whatever the headings cover; zero offset 0 and GPS in time."""
    assert log.probe is not None
    nothing = np.empty((0, 2))
    return fit_series(build_series(log, log.probe, nothing, nothing))


def fit_series(series: AirDataSeries) -> FitResult:
    """As `fit_legs`, of a series in the air."""
    loiters = find_loiters(series)
    offset, delay = OffsetPrior(0.0, 1e-3), DelayPrior(0.0, 1e-3)
    first = preliminary_fit(series, np.ones(series.time_s.size, dtype=bool), loiters, offset, delay)
    assert isinstance(first, PreliminaryFit), first
    return fit_scale_and_wind(series, loiters, first, offset, ZeroOffsetSource.GIVEN, delay)

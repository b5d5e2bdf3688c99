"""Flights of straight legs made from worked examples: constant ground velocity and reading on each, joined abruptly."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.airdata.atmosphere import standard_pressure_from_altitude, standard_temperature_from_altitude
from service.airdata.pitot import impact_pressure_from_true_airspeed
from service.domain.arrays import FloatArray
from service.domain.codes import LogFormat
from service.domain.log import DecodedLog, GpsSamples, ProbeSamples, StaticSamples, TemperatureSamples
from service.domain.results import Reduction
from service.domain.settings import ProbeSettings, Settings
from service.pipeline import reduce_flight

KNOT_MPS = 1852.0 / 3600.0
DITHER_PA = 0.1
"""Unrest of the reading, up and down by turns: a live sensor never repeats itself to the last digit."""
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


def log_of_legs(legs: Sequence[Leg], altitude_m: float = 0.0, leg_s: float = 45.0, rate_hz: float = 5.0) -> DecodedLog:
    """The legs one after another in the standard atmosphere at one altitude, without noise."""
    each = round(leg_s * rate_hz)
    time_s = np.arange(each * len(legs)) / rate_hz
    constant = np.ones(time_s.size)
    dither = DITHER_PA * (-1.0) ** np.arange(time_s.size)

    def held(values: Sequence[float]) -> FloatArray:
        return np.repeat(np.asarray(values, dtype=np.float64), each)

    return DecodedLog(
        format=LogFormat.BATCH,
        sha256="0" * 64,
        start_utc=None,
        truncated=False,
        time_steps_back=0,
        probe=ProbeSamples(time_s, held([leg.reading_pa for leg in legs]) + dither, "probe"),
        static=StaticSamples(time_s, constant * float(standard_pressure_from_altitude(altitude_m)), "static"),
        temperature=TemperatureSamples(
            time_s, constant * float(standard_temperature_from_altitude(altitude_m)), None, "thermometer", 0.01
        ),
        gps=GpsSamples(
            time_s=time_s,
            velocity_north_mps=held([leg.velocity_north_mps for leg in legs]),
            velocity_east_mps=held([leg.velocity_east_mps for leg in legs]),
            velocity_down_mps=0.0 * constant,
            latitude_deg=None,
            longitude_deg=None,
            altitude_m=altitude_m * constant,
            speed_uncertainty_mps=None,
            source="GPS",
        ),
        attitude=None,
        load_factor=None,
        ground_contact=None,
    )


def reduce_legs(legs: Sequence[Leg], altitude_m: float = 0.0, leg_s: float = 45.0) -> Reduction:
    """Answer of the service, the zero offset given as 0."""
    return reduce_flight(log_of_legs(legs, altitude_m, leg_s), STILL_AIR_ZERO)

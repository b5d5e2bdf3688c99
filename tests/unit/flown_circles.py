"""A decoded log of circles (or legs) of known truth: the airspeed wanders, and probe and GPS tell of one motion."""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from service.airdata.atmosphere import standard_pressure_from_altitude, standard_temperature_from_altitude
from service.airdata.pitot import impact_pressure_from_true_airspeed
from service.domain.arrays import FloatArray
from service.domain.codes import LogFormat
from service.domain.log import DecodedLog, GpsSamples, ProbeSamples, StaticSamples, TemperatureSamples


@dataclass(frozen=True, slots=True)
class Flown:
    """What is flown. Wind is the velocity of the air mass; headings are those of the air velocity."""

    turns: float = 6.0
    turn_s: float = 30.0
    headings_deg: tuple[float, ...] = ()
    """Legs of `turn_s` on these headings in place of circles."""
    airspeed_mps: float = 17.0
    second_airspeed_mps: float | None = None
    """Flown in the second half."""
    wander_mps: float = 0.3
    wind_north_mps: float = 3.0
    wind_east_mps: float = -4.0
    altitude_m: float = 120.0
    temperature_off_k: float = 0.0
    pressure_scale: float = 1.1
    zero_offset_pa: float = 0.0
    noise_pa: float = 0.5
    probe_hz: float = 10.0
    gps_hz: float = 5.0
    gps_noise_mps: float = 0.05
    gps_delay_s: float = 0.25
    rest_s: float = 0.0
    """Before and after the flight."""
    seed: int = 1

    @property
    def flight_s(self) -> float:
        return self.turn_s * (len(self.headings_deg) or self.turns)

    @property
    def duration_s(self) -> float:
        return self.flight_s + 2.0 * self.rest_s


def air_speed_and_heading(flown: Flown, time_s: FloatArray) -> tuple[FloatArray, FloatArray]:
    """True airspeed [m/s] and heading [rad] at times of the log, 0 m/s at rest."""
    flying_s = time_s - flown.rest_s
    share = flying_s / flown.flight_s
    speed = np.where(share < 0.5, flown.airspeed_mps, flown.second_airspeed_mps or flown.airspeed_mps)
    # waves that fit in no turn, like an autopilot that hunts
    wander = np.sin(2.0 * np.pi * flying_s / 13.7) + np.sin(2.0 * np.pi * flying_s / 7.9 + 1.0)
    moves = ((share >= 0.0) & (share <= 1.0)) | (flown.rest_s == 0.0)
    if flown.headings_deg:
        leg = np.clip((flying_s / flown.turn_s).astype(np.int64), 0, len(flown.headings_deg) - 1)
        heading = np.radians(np.array(flown.headings_deg)[leg])
    else:
        heading = 2.0 * np.pi * flying_s / flown.turn_s
    return np.where(moves, speed + flown.wander_mps * wander, 0.0), heading


def log_of(flown: Flown, **streams: Any) -> DecodedLog:
    """The log; `streams` replace its fields."""
    rng = np.random.default_rng(flown.seed)
    probe_s = np.arange(0.0, flown.duration_s, 1.0 / flown.probe_hz)
    gps_s = np.arange(0.0, flown.duration_s, 1.0 / flown.gps_hz)
    height_m = np.interp(probe_s, *_height(flown))
    static_pa = standard_pressure_from_altitude(height_m)
    temperature_k = standard_temperature_from_altitude(height_m) + flown.temperature_off_k
    speed, _ = air_speed_and_heading(flown, probe_s)
    impact_pa = impact_pressure_from_true_airspeed(speed, static_pa, temperature_k)
    reading_pa = impact_pa / flown.pressure_scale + flown.zero_offset_pa + rng.normal(0.0, flown.noise_pa, probe_s.size)
    log = DecodedLog(
        format=LogFormat.BATCH,
        sha256="0" * 64,
        start_utc=None,
        truncated=False,
        time_steps_back=0,
        probe=ProbeSamples(probe_s, reading_pa, "probe"),
        static=StaticSamples(probe_s, static_pa + rng.normal(0.0, 1.0, probe_s.size), "static"),
        temperature=TemperatureSamples(probe_s, temperature_k, None, "thermometer", 0.5),
        gps=_gps(flown, gps_s, rng),
        attitude=None,
        load_factor=None,
        ground_contact=None,
    )
    return replace(log, **streams)


def _height(flown: Flown) -> tuple[FloatArray, FloatArray]:
    """Times and altitudes between which the aircraft climbs evenly."""
    begin, end = flown.rest_s, flown.duration_s - flown.rest_s
    ground_m = flown.altitude_m - (60.0 if flown.rest_s else 0.0)
    step = 2.0
    return (
        np.array([begin, begin + step, end - step, end]),
        np.array([ground_m, flown.altitude_m, flown.altitude_m, ground_m]),
    )


def _gps(flown: Flown, gps_s: FloatArray, rng: np.random.Generator) -> GpsSamples:
    then_s = gps_s - flown.gps_delay_s
    speed, heading = air_speed_and_heading(flown, then_s)
    moves = speed > 0.0
    noise = rng.normal(0.0, flown.gps_noise_mps, (3, gps_s.size))
    return GpsSamples(
        time_s=gps_s,
        velocity_north_mps=speed * np.cos(heading) + flown.wind_north_mps * moves + noise[0],
        velocity_east_mps=speed * np.sin(heading) + flown.wind_east_mps * moves + noise[1],
        velocity_down_mps=noise[2],
        latitude_deg=None,
        longitude_deg=None,
        altitude_m=np.interp(then_s, *_height(flown)),
        speed_uncertainty_mps=None,
        source="GPS",
    )

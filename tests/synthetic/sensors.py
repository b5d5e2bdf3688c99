"""Sensors of a simulated flight: from its history to a decoded log with the truth beside it."""

import hashlib
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
from scipy.signal import lfilter

from service.domain.arrays import FloatArray
from service.domain.codes import LogFormat
from service.domain.log import (
    AttitudeSamples,
    DecodedLog,
    GpsSamples,
    GroundContactSamples,
    LoadFactorSamples,
    ProbeSamples,
    StaticSamples,
    TemperatureSamples,
)
from service.domain.settings import Settings
from tests.synthetic.air import Atmosphere, calibrated_airspeed_mps, impact_pressure_pa
from tests.synthetic.flight import STEP_S, FlightHistory, FlightPlan, wind_factor
from tests.synthetic.truth import SimulatedFlight, TrueLoiter, TrueNoise, Truth

TRUTH_STRIDE = 2
"""The truth is kept at every second step: ten a second."""
EARTH_RADIUS_M = 6371000.0
TEMPERATURE_UNCERTAINTY_K = 0.5
"""Of the outside-air sensor, when there is one: its bias is drawn from it."""
GPS_SLOW_TIME_S = 20.0
"""Time constant of the coloured noise of GPS velocity."""
TAIL_WIND_SHARE = -0.1
"""What the probe feels of the dynamic pressure of wind from behind."""


@dataclass(frozen=True, slots=True)
class Probe:
    """`pressure_scale` is K of the contract with the static-port error in it: see `static_error`."""

    pressure_scale: float
    zero_offset_pa: float
    compensated: bool = True
    static_error: float = 0.0
    """Error of the static port as a share of the impact pressure: static reads high, the probe low."""
    noise_pa: float = 0.7
    lag_s: float = 0.0
    quantum_pa: float = 0.0
    spike_share: float = 0.0
    rate_hz: float = 10.0


@dataclass(frozen=True, slots=True)
class Gps:
    delay_s: float
    noise_mps: float = 0.07
    slow_noise_mps: float = 0.02
    """Coloured, with a time constant of `GPS_SLOW_TIME_S`."""
    rate_hz: float = 5.0
    components: bool = True
    """False: speed over ground and track only, so no vertical velocity."""
    fix: bool = True


@dataclass(frozen=True, slots=True)
class SensorSet:
    probe: Probe
    gps: Gps
    static_noise_pa: float = 2.0
    static_rate_hz: float = 10.0
    has_static: bool = True
    has_temperature: bool = True
    temperature_bias_k: float = 0.0
    has_attitude: bool = True
    has_load_factor: bool = True
    has_ground_contact: bool = False


@dataclass(frozen=True, slots=True)
class FlightName:
    family: str
    seed: int
    index: int


def sense(
    name: FlightName, plan: FlightPlan, history: FlightHistory, sensors: SensorSet, rng: np.random.Generator
) -> SimulatedFlight:
    """Let the sensors watch a flight."""
    air = _AirData(plan.atmosphere, history, sensors.probe)
    probe = _probe(air, sensors.probe, rng)
    log = DecodedLog(
        format=LogFormat.BATCH,
        sha256=hashlib.sha256(f"{name.family}/{name.seed}/{name.index}".encode()).hexdigest(),
        start_utc=datetime(2026, 5, 4, 9, 12, tzinfo=UTC),
        truncated=False,
        time_steps_back=0,
        probe=probe,
        static=_static(air, sensors, rng) if sensors.has_static else None,
        temperature=_temperature(air, sensors, rng) if sensors.has_temperature else None,
        gps=_gps(history, plan.atmosphere, sensors.gps, rng),
        attitude=_attitude(history, rng) if sensors.has_attitude else None,
        load_factor=_load_factor(history, rng) if sensors.has_load_factor else None,
        ground_contact=_ground_contact(history) if sensors.has_ground_contact else None,
    )
    truth = _truth(plan, history, air, sensors, probe.time_s)
    return SimulatedFlight(name.family, name.seed, name.index, log, Settings(), truth)


class _AirData:
    """Pressures and temperature at the aircraft, at every step of the history."""

    def __init__(self, atmosphere: Atmosphere, history: FlightHistory, probe: Probe) -> None:
        self.time_s = history.time_s
        self.temperature_k = atmosphere.temperature_k(history.height_m)
        self.pressure_pa = atmosphere.pressure_pa(history.height_m)
        velocity = history.air_velocity_mps
        self.true_airspeed_mps = np.sqrt(np.sum(velocity**2, axis=0))
        self.impact_pa = impact_pressure_pa(self.true_airspeed_mps, self.pressure_pa, self.temperature_k)
        self.felt_pa = np.where(history.on_ground, self._felt_on_ground(history, velocity), self.impact_pa)
        self.static_pa = self.pressure_pa + probe.static_error * self.felt_pa

    def _felt_on_ground(self, history: FlightHistory, velocity: FloatArray) -> FloatArray:
        """On its wheels the aircraft cannot turn into the wind: the probe feels what comes along its axis."""
        ahead = velocity[0] * np.cos(history.heading_rad) + velocity[1] * np.sin(history.heading_rad)
        pressure = impact_pressure_pa(np.abs(ahead), self.pressure_pa, self.temperature_k)
        return np.where(ahead > 0.0, pressure, TAIL_WIND_SHARE * pressure)

    def at(self, time_s: FloatArray, values: FloatArray) -> FloatArray:
        return np.interp(time_s, self.time_s, values)


def _times(history_time_s: FloatArray, rate_hz: float, rng: np.random.Generator) -> FloatArray:
    """A steady clock of its own phase, within the flight."""
    period = 1.0 / rate_hz
    end = float(history_time_s[-1])
    return np.arange(rng.uniform(0.0, period), end, period)


def _probe(air: _AirData, probe: Probe, rng: np.random.Generator) -> ProbeSamples:
    time_s = _times(air.time_s, probe.rate_hz, rng)
    # a port error takes from the reading what it adds to the static pressure: both make up the pressure scale
    ideal = air.felt_pa / probe.pressure_scale
    if probe.lag_s > 0.0:
        keep = float(np.exp(-STEP_S / probe.lag_s))
        ideal, _ = lfilter([1.0 - keep], [1.0, -keep], ideal, zi=[keep * ideal[0]])
    reading = air.at(time_s, ideal) + probe.zero_offset_pa + rng.normal(0.0, probe.noise_pa, time_s.size)
    spiked = rng.random(time_s.size) < probe.spike_share
    size = rng.uniform(20.0, 300.0, time_s.size) * rng.choice([-1.0, 1.0], time_s.size)
    reading = reading + np.where(spiked, size, 0.0)
    if probe.quantum_pa > 0.0:
        reading = np.round(reading / probe.quantum_pa) * probe.quantum_pa
    return ProbeSamples(time_s, reading, "simulated probe", compensated=probe.compensated)


def _static(air: _AirData, sensors: SensorSet, rng: np.random.Generator) -> StaticSamples:
    time_s = _times(air.time_s, sensors.static_rate_hz, rng)
    pressure = air.at(time_s, air.static_pa) + rng.normal(0.0, sensors.static_noise_pa, time_s.size)
    return StaticSamples(time_s, pressure, "simulated static port")


def _temperature(air: _AirData, sensors: SensorSet, rng: np.random.Generator) -> TemperatureSamples:
    time_s = _times(air.time_s, 1.0, rng)
    noise = rng.normal(0.0, 0.1, time_s.size)
    temperature = air.at(time_s, air.temperature_k) + sensors.temperature_bias_k + noise
    return TemperatureSamples(time_s, temperature, None, "simulated outside-air sensor", TEMPERATURE_UNCERTAINTY_K)


def _gps(history: FlightHistory, atmosphere: Atmosphere, gps: Gps, rng: np.random.Generator) -> GpsSamples:
    time_s = _times(history.time_s, gps.rate_hz, rng)
    then = time_s - gps.delay_s
    velocity = np.array([np.interp(then, history.time_s, part) for part in history.velocity_mps])
    noise = _gps_noise(gps, time_s.size, rng)
    noise[2] *= 2.0
    velocity += noise
    position = np.array([np.interp(then, history.time_s, part) for part in history.position_m])
    position[2] = -position[2] + atmosphere.ground_elevation_m + rng.normal(0.0, 2.0)
    position += rng.normal(0.0, 0.5, position.shape)
    latitude, longitude = _geodetic(position, rng)
    if not gps.fix:
        velocity[:] = np.nan
    return GpsSamples(
        time_s=time_s,
        velocity_north_mps=velocity[0],
        velocity_east_mps=velocity[1],
        velocity_down_mps=velocity[2] if gps.components else None,
        latitude_deg=latitude,
        longitude_deg=longitude,
        altitude_m=position[2],
        speed_uncertainty_mps=np.full(time_s.size, 0.3),
        source="simulated receiver",
    )


def _gps_noise(gps: Gps, count: int, rng: np.random.Generator) -> FloatArray:
    """(3, count) white plus slow noise. [m/s]"""
    keep = float(np.exp(-1.0 / (GPS_SLOW_TIME_S * gps.rate_hz)))
    drive = rng.normal(0.0, gps.slow_noise_mps * np.sqrt(1.0 - keep**2), (3, count))
    drive[:, 0] = rng.normal(0.0, gps.slow_noise_mps, 3)
    return np.asarray(lfilter([1.0], [1.0, -keep], drive, axis=1) + rng.normal(0.0, gps.noise_mps, (3, count)))


def _geodetic(position: FloatArray, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
    """Latitude and longitude about an invented field. [deg]"""
    origin_latitude, origin_longitude = rng.uniform(-50.0, 50.0), rng.uniform(-170.0, 170.0)
    latitude = origin_latitude + np.degrees(position[0] / EARTH_RADIUS_M)
    shrink = np.cos(np.radians(origin_latitude))
    return latitude, origin_longitude + np.degrees(position[1] / (EARTH_RADIUS_M * shrink))


def _attitude(history: FlightHistory, rng: np.random.Generator) -> AttitudeSamples:
    time_s = _times(history.time_s, 10.0, rng)
    bias = rng.normal(0.0, [1.0, 1.0, 3.0])
    angles = [
        np.degrees(np.interp(time_s, history.time_s, angle)) + offset + rng.normal(0.0, 0.5, time_s.size)
        for angle, offset in zip((history.bank_rad, history.pitch_rad, history.heading_rad), bias, strict=True)
    ]
    return AttitudeSamples(time_s, angles[0], angles[1], angles[2] % 360.0)


def _load_factor(history: FlightHistory, rng: np.random.Generator) -> LoadFactorSamples:
    time_s = _times(history.time_s, 20.0, rng)
    felt = np.interp(time_s, history.time_s, history.load_factor)
    return LoadFactorSamples(time_s, felt + rng.normal(0.0, 0.05, time_s.size), "simulated accelerometer")


def _ground_contact(history: FlightHistory) -> GroundContactSamples:
    """Once a second."""
    every = round(1.0 / STEP_S)
    return GroundContactSamples(history.time_s[::every], history.on_ground[::every])


def _truth(
    plan: FlightPlan, history: FlightHistory, air: _AirData, sensors: SensorSet, probe_time_s: FloatArray
) -> Truth:
    kept = slice(None, None, TRUTH_STRIDE)
    velocity = history.air_velocity_mps
    undisturbed = _undisturbed_wind(plan, history)
    return Truth(
        pressure_scale=sensors.probe.pressure_scale,
        zero_offset_pa=sensors.probe.zero_offset_pa,
        gps_delay_s=sensors.gps.delay_s,
        sigma_mps=plan.gust.sigma_mps,
        length_m=plan.gust.length_m,
        gust=plan.gust,
        noise=TrueNoise(sensors.probe.noise_pa, sensors.gps.noise_mps, sensors.gps.slow_noise_mps, GPS_SLOW_TIME_S),
        mean_wind_north_mps=plan.wind.north_mps,
        mean_wind_east_mps=plan.wind.east_mps,
        loiters=_loiters(plan, history),
        probe_true_airspeed_mps=air.at(probe_time_s, air.true_airspeed_mps),
        probe_calibrated_airspeed_mps=calibrated_airspeed_mps(air.at(probe_time_s, air.impact_pa)),
        probe_time_s=probe_time_s,
        time_s=history.time_s[kept],
        air_north_mps=history.local_air_mps[0, kept],
        air_east_mps=history.local_air_mps[1, kept],
        air_down_mps=history.local_air_mps[2, kept],
        undisturbed_north_mps=undisturbed[0, kept],
        undisturbed_east_mps=undisturbed[1, kept],
        ground_velocity_mps=history.velocity_mps[:, kept],
        true_airspeed_mps=air.true_airspeed_mps[kept],
        heading_deg=np.degrees(np.arctan2(velocity[1], velocity[0]))[kept] % 360.0,
        fuselage_heading_deg=np.degrees(history.heading_rad[kept]) % 360.0,
        height_m=history.height_m[kept],
        load_factor=history.load_factor[kept],
        static_pressure_pa=air.pressure_pa[kept],
        air_temperature_k=air.temperature_k[kept],
        on_ground=history.on_ground[kept],
    )


def _undisturbed_wind(plan: FlightPlan, history: FlightHistory) -> FloatArray:
    """(2, n) mean wind north and east at every step. [m/s]"""
    wind = plan.wind
    at_100_m = np.array([[wind.north_mps], [wind.east_mps]])
    drift = np.array([[wind.drift_north_mps2], [wind.drift_east_mps2]])
    return np.asarray((at_100_m + drift * history.time_s) * wind_factor(history.height_m, wind.exponent))


def _loiters(plan: FlightPlan, history: FlightHistory) -> tuple[TrueLoiter, ...]:
    found = []
    for number in np.unique(history.loiter[history.loiter >= 0]):
        inside = np.flatnonzero(history.loiter == number)
        kinds = {s.direction for s in plan.segments if s.loiter == number}
        north, east = history.local_air_mps[:2, inside].mean(axis=1)
        start_s, end_s = history.time_s[inside[0]], history.time_s[inside[-1]]
        direction = kinds.pop() if len(kinds) == 1 else 0
        found.append(TrueLoiter(float(start_s), float(end_s), direction, float(north), float(east)))
    return tuple(found)

"""Families of simulated flights, by name: `simulate("light", count=40, seed=1)`.

Names and values are those of the method notes; whatever they leave open is drawn from the ranges written here and in
`scenario`. A flight depends on its family, seed and index alone, not on how many are simulated with it.
"""

import zlib
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from service.domain.codes import FaultKind
from tests.synthetic.faults import INJECTORS, Span
from tests.synthetic.flight import Leg, Segment, fly_plans
from tests.synthetic.gust_field import GustModel, Spectrum, low_altitude_dryden
from tests.synthetic.scenario import (
    Scenario,
    Setting,
    change_gps,
    change_probe,
    circles,
    draw_setting,
    few_turns,
    make_scenario,
    opposite_loiters,
    straight,
    two_loiters,
    von_karman,
    with_ground,
)
from tests.synthetic.sensors import FlightName, sense
from tests.synthetic.truth import SimulatedFlight

BATCH = 100
"""Flights stepped together."""
CALIBRATED_AIRSPEED_MPS = 17.0

Draw = Callable[[np.random.Generator], Scenario]
Finish = Callable[[SimulatedFlight, np.random.Generator], SimulatedFlight]


@dataclass(frozen=True, slots=True)
class Family:
    """`refused`: it holds no calibration, and a right program says so. `finish` lays a fault onto the flight."""

    draw: Draw
    refused: bool = False
    finish: Finish | None = None


def _loiters(sigma_mps: float, wind_mps: float) -> Draw:
    def draw(rng: np.random.Generator) -> Scenario:
        setting = draw_setting(rng, von_karman(sigma_mps), wind_mps)
        return make_scenario(setting, opposite_loiters(setting))

    return draw


LIGHT_SIGMA_MPS = 0.4
LIGHT_WIND_MPS = 6.0
_light = _loiters(LIGHT_SIGMA_MPS, LIGHT_WIND_MPS)


def _light_setting(rng: np.random.Generator) -> Setting:
    return draw_setting(rng, von_karman(LIGHT_SIGMA_MPS), LIGHT_WIND_MPS)


def _grounded_light(rng: np.random.Generator) -> Scenario:
    setting = _light_setting(rng)
    return with_ground(make_scenario(setting, opposite_loiters(setting)), setting)


def _two_speeds(compensated: bool) -> Draw:
    """Zero offset to be fitted: no time at rest."""

    def draw(rng: np.random.Generator) -> Scenario:
        setting = _light_setting(rng)
        slow, fast = rng.permutation([14.5, 22.0])
        turn = int(rng.choice([-1, 1]))
        first = circles(setting, 0, turn, calibrated_airspeed_mps=float(slow))
        second = circles(setting, 1, -turn, calibrated_airspeed_mps=float(fast))
        scenario = make_scenario(setting, two_loiters(setting, first, second))
        if compensated:
            return scenario
        return change_probe(scenario, zero_offset_pa=rng.uniform(60.0, 120.0), compensated=False)

    return draw


def _strong_wind(rng: np.random.Generator) -> Scenario:
    """The wind is 0.75 of the airspeed; half of the flights circle over the ground, the others with the air."""
    setting = draw_setting(rng, von_karman(LIGHT_SIGMA_MPS), 1.0)
    speed = 0.75 * setting.true_airspeed(CALIBRATED_AIRSPEED_MPS, 100.0)
    wind = replace(setting.wind, north_mps=setting.wind.north_mps * speed, east_mps=setting.wind.east_mps * speed)
    setting = replace(setting, wind=wind)
    segments = opposite_loiters(setting)
    if rng.random() < 0.5:
        circling = {Leg.AIR_CIRCLE: Leg.GROUND_CIRCLE}
        segments = tuple(replace(s, leg=circling.get(s.leg, s.leg)) for s in segments)
    return make_scenario(setting, segments, bank_limit_deg=55.0)


def _slow_sensors(rng: np.random.Generator) -> Scenario:
    scenario = _light(rng)
    return change_gps(change_probe(scenario, rate_hz=1.0), rate_hz=1.0, delay_s=0.4)


def _light_aircraft(rng: np.random.Generator) -> Scenario:
    setting = draw_setting(rng, von_karman(0.6, 500.0), 8.0, exponent=0.0)
    setting = replace(setting, atmosphere=replace(setting.atmosphere, ground_elevation_m=rng.uniform(0.0, 100.0)))
    segments = opposite_loiters(setting, calibrated_airspeed_mps=50.0, height_m=2000.0, radius_m=550.0)
    return make_scenario(setting, segments)


def _one_loiter(rng: np.random.Generator) -> Scenario:
    setting = _light_setting(rng)
    return make_scenario(setting, few_turns(1.3, setting))


def _shear_drift(rng: np.random.Generator) -> Scenario:
    """Loiters at 80 and 230 m, either first; shear exponent 0.2; the wind drifts by 0.25 m/s per minute."""
    setting = draw_setting(rng, von_karman(LIGHT_SIGMA_MPS), LIGHT_WIND_MPS, exponent=0.2)
    drift, toward = 0.25 / 60.0, rng.uniform(0.0, 2.0 * np.pi)
    drifting = {"drift_north_mps2": drift * np.cos(toward), "drift_east_mps2": drift * np.sin(toward)}
    setting = replace(setting, wind=replace(setting.wind, **drifting))
    heights = rng.permutation([80.0, 230.0])
    turn = int(rng.choice([-1, 1]))
    first = circles(setting, 0, turn, height_m=float(heights[0]))
    second = circles(setting, 1, -turn, height_m=float(heights[1]))
    return make_scenario(setting, two_loiters(setting, first, second, transit_s=75.0))


def _spikes(rng: np.random.Generator) -> Scenario:
    return change_probe(_light(rng), spike_share=0.01)


def _large_zero_with_ground(rng: np.random.Generator) -> Scenario:
    scenario = _grounded_light(rng)
    return change_probe(scenario, zero_offset_pa=rng.uniform(60.0, 120.0), compensated=False)


def _large_zero_no_ground(rng: np.random.Generator) -> Scenario:
    return change_probe(_light(rng), zero_offset_pa=rng.uniform(60.0, 120.0), compensated=False)


def _static_error(rng: np.random.Generator) -> Scenario:
    """The port reads high by 2 % of the impact pressure; the probe then reads low by as much: K grows."""
    scenario = _light(rng)
    scale = scenario.sensors.probe.pressure_scale / (1.0 - 0.02)
    return change_probe(scenario, static_error=0.02, pressure_scale=scale)


def _gps_delay(rng: np.random.Generator) -> Scenario:
    """Towards the late end of the range."""
    return change_gps(_light(rng), delay_s=rng.uniform(0.3, 0.5))


def _speed_and_track_only(rng: np.random.Generator) -> Scenario:
    return change_gps(_light(rng), components=False)


def _standard_temperature_only(rng: np.random.Generator) -> Scenario:
    scenario = _light(rng)
    return replace(scenario, sensors=replace(scenario.sensors, has_temperature=False))


def _other_field(gust: Callable[[], GustModel]) -> Draw:
    def draw(rng: np.random.Generator) -> Scenario:
        setting = draw_setting(rng, gust(), LIGHT_WIND_MPS)
        return make_scenario(setting, opposite_loiters(setting))

    return draw


def _dryden() -> GustModel:
    return GustModel(Spectrum.DRYDEN, LIGHT_SIGMA_MPS, 200.0)


def _decaying() -> GustModel:
    return replace(von_karman(LIGHT_SIGMA_MPS), turnover_s=200.0 / LIGHT_SIGMA_MPS)


def _anisotropic() -> GustModel:
    return low_altitude_dryden(0.5, 100.0)


def _legs(headings_deg: tuple[float, ...], leg_s: float) -> Draw:
    """Straight legs on headings counted from a first one at random, turned the shortest way."""

    def draw(rng: np.random.Generator) -> Scenario:
        setting = _light_setting(rng)
        first = rng.uniform(0.0, 360.0)
        like = Segment(Leg.STRAIGHT, leg_s)
        legs = tuple(straight(leg_s, like, first + heading, loiter=0) for heading in headings_deg)
        scenario = make_scenario(setting, legs)
        return replace(scenario, plan=replace(scenario.plan, start_heading_deg=first))

    return draw


def _cloverleaf(rng: np.random.Generator) -> Scenario:
    """Three legs 120 degrees apart, each left by a long turn the same way round."""
    setting = _light_setting(rng)
    turn, first, like = int(rng.choice([-1, 1])), rng.uniform(0.0, 360.0), Segment(Leg.STRAIGHT, 45.0)
    speed = setting.true_airspeed(like.calibrated_airspeed_mps, like.height_m)
    turn_s = 2.0 / 3.0 * 2.0 * np.pi * like.radius_m / speed
    turning = replace(like, leg=Leg.AIR_CIRCLE, duration_s=turn_s, direction=turn, loiter=0)
    legs = [straight(45.0, like, first + turn * 240.0 * number, loiter=0) for number in range(3)]
    scenario = make_scenario(setting, (legs[0], turning, legs[1], turning, legs[2]))
    return replace(scenario, plan=replace(scenario.plan, start_heading_deg=first))


def _half_circle(rng: np.random.Generator) -> Scenario:
    setting = draw_setting(rng, von_karman(LIGHT_SIGMA_MPS), 2.0)
    return make_scenario(setting, few_turns(0.48, setting))


def _ground_only(rng: np.random.Generator) -> Scenario:
    setting = _light_setting(rng)
    return make_scenario(setting, (Segment(Leg.REST, rng.uniform(120.0, 240.0)),))


def _no_fix(rng: np.random.Generator) -> Scenario:
    return change_gps(_light(rng), fix=False)


def _broken(kind: FaultKind) -> Finish:
    """A probe that fails within the first ten seconds and for good."""

    def finish(flight: SimulatedFlight, rng: np.random.Generator) -> SimulatedFlight:
        start_s = rng.uniform(0.0, 10.0) if kind is not FaultKind.SWAPPED else 0.0
        return INJECTORS[kind](flight, Span(start_s, float(flight.truth.time_s[-1])), rng)

    return finish


FAMILIES: dict[str, Family] = {
    "calm": Family(_loiters(0.15, 3.0)),
    "light": Family(_light),
    "moderate": Family(_loiters(0.9, 8.0)),
    "still_air": Family(_loiters(0.4, 0.5)),
    "two_speeds": Family(_two_speeds(compensated=True)),
    "two_speeds_large_zero": Family(_two_speeds(compensated=False)),
    "strong_wind": Family(_strong_wind),
    "slow_sensors": Family(_slow_sensors),
    "light_aircraft": Family(_light_aircraft),
    "one_loiter": Family(_one_loiter),
    "shear_drift": Family(_shear_drift),
    "spikes": Family(_spikes),
    "with_ground": Family(_grounded_light),
    "large_zero_with_ground": Family(_large_zero_with_ground),
    "large_zero_no_ground": Family(_large_zero_no_ground),
    "static_error": Family(_static_error),
    "gps_delay": Family(_gps_delay),
    "speed_and_track_only": Family(_speed_and_track_only),
    "standard_temperature_only": Family(_standard_temperature_only),
    "dryden": Family(_other_field(_dryden)),
    "decaying": Family(_other_field(_decaying)),
    "anisotropic": Family(_other_field(_anisotropic)),
    "box": Family(_legs((0.0, 90.0, 180.0, 270.0) * 2, 45.0)),
    "three_legs": Family(_legs((0.0, 120.0, 240.0), 60.0)),
    "cloverleaf": Family(_cloverleaf),
    "straight_only": Family(_legs((0.0,), 300.0), refused=True),
    "half_circle": Family(_half_circle, refused=True),
    "ground_only": Family(_ground_only, refused=True),
    "no_fix": Family(_no_fix, refused=True),
    "frozen": Family(_light, refused=True, finish=_broken(FaultKind.FROZEN)),
    "blocked": Family(_light, refused=True, finish=_broken(FaultKind.BLOCKED)),
    "trapped": Family(_light, refused=True, finish=_broken(FaultKind.TRAPPED)),
    "swapped": Family(_light, refused=True, finish=_broken(FaultKind.SWAPPED)),
}


def _generators(family: str, seed: int, index: int) -> tuple[np.random.Generator, ...]:
    """Independent generators for the plan, the gust field, the sensors and the faults of one flight."""
    root = np.random.SeedSequence([seed, zlib.crc32(family.encode()), index])
    return tuple(np.random.default_rng(child) for child in root.spawn(4))


def _simulate_batch(wanted: Sequence[tuple[str, int]], seed: int) -> list[SimulatedFlight]:
    """Flights given by family and index, stepped together."""
    streams = [_generators(family, seed, index) for family, index in wanted]
    scenarios = [FAMILIES[family].draw(stream[0]) for (family, _), stream in zip(wanted, streams, strict=True)]
    histories = fly_plans([s.plan for s in scenarios], [stream[1] for stream in streams])
    flights = []
    for (family, index), scenario, history, stream in zip(wanted, scenarios, histories, streams, strict=True):
        flight = sense(FlightName(family, seed, index), scenario.plan, history, scenario.sensors, stream[2])
        finish = FAMILIES[family].finish
        flights.append(finish(flight, stream[3]) if finish else flight)
    return flights


def simulate_each(family: str, count: int, seed: int, first: int = 0) -> Iterator[SimulatedFlight]:
    """Flights `first` to `first + count - 1` of a family, made in batches: a thousand need not fit in memory."""
    for start in range(first, first + count, BATCH):
        stop = min(start + BATCH, first + count)
        yield from _simulate_batch([(family, index) for index in range(start, stop)], seed)


def simulate(family: str, count: int, seed: int) -> list[SimulatedFlight]:
    """The first `count` flights of a family; the same seed gives the same flights."""
    return list(simulate_each(family, count, seed))


def simulate_mixed(families: Iterable[str], count: int, seed: int) -> dict[str, list[SimulatedFlight]]:
    """`simulate` for several families in one batch: the quick way to a few flights of each."""
    wanted = [(family, index) for family in families for index in range(count)]
    flights: dict[str, list[SimulatedFlight]] = {}
    for flight in _simulate_batch(wanted, seed):
        flights.setdefault(flight.family, []).append(flight)
    return flights

"""The flights behind `samples/`: an invented survey aircraft, the Brackenwing, over the invented Vale of Ostrell.

Both are simulated through a gust field with known truth. `survey` is a whole flight from rest to rest; `half_circle`
turns through less than a calibration needs.
"""

from dataclasses import replace
from functools import cache
from typing import Any, TypeVar

import numpy as np

from service.domain.log import (
    AttitudeSamples,
    DecodedLog,
    GpsSamples,
    LoadFactorSamples,
    ProbeSamples,
    StaticSamples,
    TemperatureSamples,
)
from tests.synthetic.air import Atmosphere
from tests.synthetic.flight import MeanWind, fly_plans
from tests.synthetic.scenario import (
    Scenario,
    Setting,
    circles,
    few_turns,
    make_scenario,
    straight,
    von_karman,
    with_ground,
)
from tests.synthetic.sensors import FlightName, Gps, Probe, SensorSet, sense
from tests.synthetic.truth import SimulatedFlight

Samples = TypeVar(
    "Samples", ProbeSamples, StaticSamples, TemperatureSamples, GpsSamples, AttitudeSamples, LoadFactorSamples
)

SEED = 20260508
SPEED_SCALE = 0.94
"""The probe reads 6 % fast: what hides a stall."""
SLOW_MPS = 12.8
"""CAS of the stretch with a thin margin: 1.13 times the stall speed at the mass flown."""

SETTINGS = {
    "aircraft": {
        "reference_mass_kg": 6.0,
        "mass_kg": 6.4,
        "mass_uncertainty_kg": 0.1,
        "maximum_bank_deg": 45,
        "configurations": [{"name": "clean", "stall_speed_mps": 11.0, "stall_speed_uncertainty_mps": 0.3}],
    },
    "warnings": {"caution_below": 0.3, "warning_below": 0.1, "hold_s": 0.5},
}
"""`settings.json`."""

COLUMNS = {
    "clock": {"quantity": "time_s", "unit": "s"},
    "pitot dp": {"quantity": "impact_pressure_pa", "unit": "hPa"},
    "static": {"quantity": "static_pressure_pa", "unit": "hPa"},
    "OAT": {"quantity": "air_temperature_k", "unit": "degC"},
    "GS": {"quantity": "ground_speed_mps", "unit": "kt"},
    "TRK": {"quantity": "track_deg", "unit": "deg"},
    "ALT": {"quantity": "altitude_m", "unit": "ft"},
    "nz": {"quantity": "load_factor", "unit": "g"},
}
"""Of the foreign table: heading -> meaning."""


@cache
def survey() -> SimulatedFlight:
    """Rest, take-off, a loiter to the right, a slow stretch, a loiter to the left, landing, rest."""
    setting = _setting(np.random.default_rng(SEED))
    first = circles(setting, 0, 1, 170.0)
    second = circles(setting, 1, -1, 170.0)
    slow = replace(straight(40.0, first, 310.0), calibrated_airspeed_mps=SLOW_MPS)
    segments = (straight(15.0, first), first, straight(15.0, first, 310.0), slow, straight(15.0, second), second)
    scenario = make_scenario(setting, (*segments, straight(10.0, second)))
    return _decimated(_flown("survey", with_ground(scenario, setting)))


@cache
def half_circle() -> SimulatedFlight:
    """Less than half a turn between straight legs."""
    setting = _setting(np.random.default_rng(SEED + 1))
    return _decimated(_flown("half_circle", make_scenario(setting, few_turns(0.45, setting))))


def _setting(rng: np.random.Generator) -> Setting:
    """A fair May morning: 5 m/s from the south-west at 100 m, light gusts."""
    wind = MeanWind(4.0, 3.0)
    probe = Probe(SPEED_SCALE**2, 4.2, noise_pa=0.6, rate_hz=5.0)
    sensors = SensorSet(probe, Gps(0.18, rate_hz=5.0), static_rate_hz=2.0, temperature_bias_k=0.4)
    return Setting(rng, wind, von_karman(0.3), Atmosphere(180.0, 3.0, 250.0), sensors)


def _flown(name: str, scenario: Scenario) -> SimulatedFlight:
    field, noise = (np.random.default_rng(child) for child in np.random.SeedSequence(SEED).spawn(2))
    (history,) = fly_plans([scenario.plan], [field])
    return sense(FlightName(name, SEED, 0), scenario.plan, history, scenario.sensors, noise)


def _decimated(flight: SimulatedFlight) -> SimulatedFlight:
    """Attitude and load factor five times a second, and no more digits than such recorders write."""
    log = flight.log
    assert log.probe is not None
    assert log.static is not None
    assert log.temperature is not None
    assert log.gps is not None
    assert log.attitude is not None
    assert log.load_factor is not None
    kept = DecodedLog(
        format=log.format,
        sha256=log.sha256,
        start_utc=log.start_utc,
        truncated=False,
        time_steps_back=0,
        probe=_rounded(log.probe, impact_pressure_pa=2),
        static=_rounded(log.static, static_pressure_pa=1),
        temperature=_rounded(log.temperature, air_temperature_k=2),
        gps=_rounded(
            log.gps,
            velocity_north_mps=3,
            velocity_east_mps=3,
            velocity_down_mps=3,
            latitude_deg=7,
            longitude_deg=7,
            altitude_m=2,
            speed_uncertainty_mps=2,
        ),
        attitude=_rounded(log.attitude, every=2, roll_deg=1, pitch_deg=1, yaw_deg=1),
        load_factor=_rounded(log.load_factor, every=4, load_factor=3),
        ground_contact=None,
    )
    return replace(flight, log=kept)


def _rounded(samples: Samples, every: int = 1, **decimals: int) -> Samples:
    """A stream with times to the millisecond, its columns rounded, and every so many-th sample alone."""
    columns = {"time_s": 3} | decimals
    changed: dict[str, Any] = {
        name: np.round(getattr(samples, name)[::every], digits) for name, digits in columns.items()
    }
    return replace(samples, **changed)

"""What a simulated flight is put together from: air and sensors drawn by the priors, and pieces of a flight path."""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from tests.synthetic.air import SEA_LEVEL_DENSITY, Atmosphere
from tests.synthetic.aircraft import draw_response
from tests.synthetic.flight import (
    TAKE_OFF_ACCELERATION_MPS2,
    FlightPlan,
    Leg,
    MeanWind,
    Segment,
    circle_period_s,
    wind_factor,
)
from tests.synthetic.gust_field import GustModel, Spectrum
from tests.synthetic.sensors import TEMPERATURE_UNCERTAINTY_K, Gps, Probe, SensorSet

LOITER_S = 180.0
STEEPEST_GROUND_CIRCLE_DEG = 42.0
"""Above it the circle is flown in the air mass, at constant bank."""


@dataclass(frozen=True, slots=True)
class Scenario:
    plan: FlightPlan
    sensors: SensorSet


@dataclass(frozen=True, slots=True)
class Setting:
    """The air and the sensors of one flight, drawn before its path is laid out."""

    rng: np.random.Generator
    wind: MeanWind
    gust: GustModel
    atmosphere: Atmosphere
    sensors: SensorSet

    def true_airspeed(self, calibrated_mps: float, height_m: float) -> float:
        """Good to a part in a thousand, enough to plan with. [m/s]"""
        density = float(self.atmosphere.density(np.array(height_m)))
        return calibrated_mps * float(np.sqrt(SEA_LEVEL_DENSITY / density))

    def wind_speed(self, height_m: float) -> float:
        """Mean wind at a height. [m/s]"""
        factor = float(wind_factor(np.array(height_m), self.wind.exponent))
        return factor * float(np.hypot(self.wind.north_mps, self.wind.east_mps))

    @property
    def wind_from_deg(self) -> float:
        return float(np.degrees(np.arctan2(-self.wind.east_mps, -self.wind.north_mps)))


def von_karman(sigma_mps: float, length_m: float = 200.0) -> GustModel:
    """A frozen isotropic field of the families' usual length."""
    return GustModel(Spectrum.VON_KARMAN, sigma_mps, length_m)


def draw_setting(rng: np.random.Generator, gust: GustModel, wind_mps: float, exponent: float = 1.0 / 7.0) -> Setting:
    """Truth drawn as the method notes say; the scale U(0.9, 1.14) is that of speed, the wider reading of theirs."""
    toward = rng.uniform(0.0, 2.0 * np.pi)
    wind = MeanWind(wind_mps * np.cos(toward), wind_mps * np.sin(toward), exponent)
    atmosphere = Atmosphere(rng.uniform(0.0, 600.0), rng.normal(0.0, 10.0), rng.normal(0.0, 600.0))
    probe = Probe(rng.uniform(0.9, 1.14) ** 2, rng.normal(0.0, 1.0), noise_pa=rng.uniform(0.5, 1.0))
    gps = Gps(rng.uniform(0.05, 0.5), noise_mps=rng.uniform(0.05, 0.1))
    sensors = SensorSet(probe, gps, temperature_bias_k=rng.normal(0.0, TEMPERATURE_UNCERTAINTY_K))
    return Setting(rng, wind, gust, atmosphere, sensors)


def circles(setting: Setting, loiter: int, direction: int, duration_s: float = LOITER_S, **changes: Any) -> Segment:
    """Circles over the ground where bank allows it in this wind, else in the air mass."""
    circle = Segment(Leg.GROUND_CIRCLE, duration_s, direction=direction, loiter=loiter)
    circle = replace(circle, **changes)
    speed = setting.true_airspeed(circle.calibrated_airspeed_mps, circle.height_m)
    downwind = speed + setting.wind_speed(circle.height_m)
    bank_deg = np.degrees(np.arctan(downwind**2 / (circle.radius_m * 9.8)))
    return replace(circle, leg=Leg.AIR_CIRCLE) if bank_deg > STEEPEST_GROUND_CIRCLE_DEG else circle


def straight(duration_s: float, like: Segment, heading_deg: float = np.nan, loiter: int = -1) -> Segment:
    """A leg at the speed and height of another segment."""
    return replace(like, leg=Leg.STRAIGHT, duration_s=duration_s, heading_deg=heading_deg, loiter=loiter, direction=0)


def two_loiters(setting: Setting, first: Segment, second: Segment, transit_s: float = 30.0) -> tuple[Segment, ...]:
    """An approach leg, a loiter, a transit, a loiter the other way round, a leaving leg."""
    transit = straight(transit_s, second, setting.rng.uniform(0.0, 360.0))
    return (straight(20.0, first), first, transit, second, straight(15.0, second))


def opposite_loiters(setting: Setting, duration_s: float = LOITER_S, **changes: Any) -> tuple[Segment, ...]:
    """Two loiters alike but for the turn; `changes` are fields of both."""
    turn = int(setting.rng.choice([-1, 1]))
    return two_loiters(
        setting, circles(setting, 0, turn, duration_s, **changes), circles(setting, 1, -turn, duration_s, **changes)
    )


def make_scenario(setting: Setting, segments: tuple[Segment, ...], **response: float) -> Scenario:
    """An aircraft drawn for the path; `response` are arguments of `draw_response`."""
    plan = FlightPlan(
        segments,
        setting.rng.uniform(0.0, 360.0),
        setting.wind,
        setting.gust,
        draw_response(setting.rng, **response),
        setting.atmosphere,
    )
    return Scenario(plan, setting.sensors)


def with_ground(scenario: Scenario, setting: Setting) -> Scenario:
    """Rest, take-off roll and climb before; descent, roll and rest after."""
    rng = setting.rng
    segments = scenario.plan.segments
    into_wind = setting.wind_from_deg + rng.normal(0.0, 20.0)
    climb_s = segments[0].height_m / scenario.plan.response.climb_limit_mps + 15.0
    lift_off = 0.95 * segments[0].calibrated_airspeed_mps - setting.wind_speed(0.5)
    before = (
        Segment(Leg.REST, rng.uniform(30.0, 60.0)),
        Segment(Leg.ROLL, max(lift_off / TAKE_OFF_ACCELERATION_MPS2, 1.0)),
        straight(climb_s, segments[0], into_wind),
    )
    last = segments[-1]
    landing_s = last.height_m / scenario.plan.response.climb_limit_mps + 40.0
    after = (
        replace(straight(landing_s, last, into_wind), leg=Leg.LAND, height_m=-10.0),
        Segment(Leg.REST, rng.uniform(20.0, 40.0)),
    )
    plan = replace(scenario.plan, segments=before + segments + after, start_heading_deg=into_wind)
    return replace(scenario, plan=plan)


def change_probe(scenario: Scenario, **changes: Any) -> Scenario:
    """The scenario with other fields of :class:`Probe`."""
    return replace(scenario, sensors=replace(scenario.sensors, probe=replace(scenario.sensors.probe, **changes)))


def change_gps(scenario: Scenario, **changes: Any) -> Scenario:
    """The scenario with other fields of :class:`Gps`."""
    return replace(scenario, sensors=replace(scenario.sensors, gps=replace(scenario.sensors.gps, **changes)))


def few_turns(turns: float, setting: Setting) -> tuple[Segment, ...]:
    """One loiter of so many turns between straight legs that keep their headings."""
    circle = circles(setting, 0, int(setting.rng.choice([-1, 1])))
    speed = setting.true_airspeed(circle.calibrated_airspeed_mps, circle.height_m)
    circle = replace(circle, duration_s=turns * circle_period_s(speed, setting.wind_speed(100.0), circle.radius_m))
    return (straight(20.0, circle), circle, straight(20.0, circle))

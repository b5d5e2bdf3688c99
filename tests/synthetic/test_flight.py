"""The simulated aircraft obeys mechanics, and flies what its plan says."""

from dataclasses import replace

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from tests.synthetic.air import GRAVITY, Atmosphere
from tests.synthetic.aircraft import AircraftResponse, Motion, ResponseArrays, fly
from tests.synthetic.flight import (
    FlightHistory,
    FlightPlan,
    Leg,
    MeanWind,
    Segment,
    circle_period_s,
    fly_plans,
    wind_factor,
)
from tests.synthetic.gust_field import GustField, GustModel, Spectrum

RESPONSE = AircraftResponse(
    speed_time_s=5.0,
    side_time_s=1.5,
    yaw_time_s=2.0,
    vertical_time_s=0.7,
    bank_time_s=0.5,
    height_time_s=6.0,
    climb_limit_mps=3.0,
    turning_drag_mps2=0.0,
    bank_limit_deg=50.0,
)
SEA_LEVEL = Atmosphere(0.0, 0.0, 0.0)
STILL = GustModel(Spectrum.VON_KARMAN, 1e-6, 200.0)


def _forces(air: FloatArray, bank: float = 0.0, heading: float = 0.0, speed_mps: float = 17.0) -> Motion:
    one = np.ones(1)
    return fly(ResponseArrays([RESPONSE]), air.reshape(3, 1), bank * one, heading * one, 0.0 * one, speed_mps * one)


def _fly(
    segments: tuple[Segment, ...], wind: MeanWind, gust: GustModel = STILL, heading: float = 30.0
) -> FlightHistory:
    plan = FlightPlan(segments, heading, wind, gust, RESPONSE, SEA_LEVEL)
    return fly_plans([plan], [np.random.default_rng(5)])[0]


def test_level_flight_at_the_commanded_speed_is_free_of_forces() -> None:
    motion = _forces(np.array([17.0, 0.0, 0.0]))
    np.testing.assert_allclose(motion.acceleration, 0.0, atol=1e-12)
    assert motion.load_factor[0] == pytest.approx(1.0)


def test_a_banked_turn_has_the_load_factor_and_the_rate_of_the_table() -> None:
    """45 degrees at 20 m/s: 1.4142 g and 28.094 degrees a second (check values, section f)."""
    motion = _forces(np.array([20.0, 0.0, 0.0]), bank=np.pi / 4.0, speed_mps=20.0)
    assert motion.load_factor[0] == pytest.approx(np.sqrt(2.0))
    assert np.degrees(motion.acceleration[1, 0] / 20.0) == pytest.approx(28.0940, abs=1e-3)
    assert motion.acceleration[2, 0] == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("gust", [[0.0, 1.0, 0.0], [0.0, 0.0, -1.0], [2.0, 0.0, 0.0]])
def test_the_aircraft_is_pushed_by_a_gust_within_its_times(gust: list[float]) -> None:
    gust_mps = np.array(gust)
    motion = _forces(np.array([17.0, 0.0, 0.0]) - gust_mps)
    times = np.array([RESPONSE.speed_time_s, RESPONSE.side_time_s, RESPONSE.vertical_time_s])
    along = np.argmax(np.abs(gust_mps))
    assert motion.acceleration[along, 0] == pytest.approx((gust_mps / times)[along], rel=0.02)


def test_lift_does_no_work_in_the_air() -> None:
    air = np.array([16.0, 1.0, 1.5])
    motion = _forces(air, bank=0.4, heading=float(np.arctan2(air[1], air[0])), speed_mps=float(np.linalg.norm(air)))
    without_gravity = motion.acceleration[:, 0] - np.array([0.0, 0.0, GRAVITY])
    assert float(without_gravity @ air) == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize("direction", [-1, 1])
@pytest.mark.parametrize("wind_mps", [0.0, 6.0, 10.0])
def test_a_circle_over_the_ground_keeps_its_radius_in_wind(wind_mps: float, direction: int) -> None:
    circle = Segment(Leg.GROUND_CIRCLE, 150.0, direction=direction, loiter=0, radius_m=120.0)
    history = _fly((Segment(Leg.STRAIGHT, 10.0), circle), MeanWind(-wind_mps, 0.0, exponent=0.0))
    settled = history.time_s > 40.0
    north, east = history.position_m[0, settled], history.position_m[1, settled]
    centre_north, centre_east = 0.5 * (north.min() + north.max()), 0.5 * (east.min() + east.max())
    radius = np.hypot(north - centre_north, east - centre_east)
    assert np.abs(radius - 120.0).max() < 4.0
    turn = np.unwrap(np.arctan2(history.velocity_mps[1, settled], history.velocity_mps[0, settled]))
    assert np.sign(turn[-1] - turn[0]) == direction
    circles = abs(turn[-1] - turn[0]) / (2.0 * np.pi)
    flown_s = history.time_s[-1] - history.time_s[settled][0]
    # part circles are flown fast or slow, by where they lie to the wind
    assert circles * circle_period_s(17.0, wind_mps, 120.0) == pytest.approx(flown_s, rel=0.15)


def test_in_still_air_the_speed_over_the_ground_is_the_airspeed_commanded() -> None:
    history = _fly((Segment(Leg.AIR_CIRCLE, 60.0), Segment(Leg.STRAIGHT, 30.0, heading_deg=90.0)), MeanWind(0.0, 0.0))
    np.testing.assert_allclose(np.hypot(*history.velocity_mps[:2]), 17.1, atol=0.2)
    east = np.degrees(np.arctan2(history.velocity_mps[1, -1], history.velocity_mps[0, -1]))
    assert east == pytest.approx(90.0, abs=1.0)


def test_the_path_integrates_the_velocity_and_the_air_is_wind_and_gust() -> None:
    gusty = replace(STILL, sigma_mps=0.5)
    history = _fly((Segment(Leg.GROUND_CIRCLE, 120.0, loiter=0),), MeanWind(3.0, -4.0, exponent=0.0), gusty)
    moved = np.trapezoid(history.velocity_mps, history.time_s, axis=1)
    np.testing.assert_allclose(moved, history.position_m[:, -1] - history.position_m[:, 0], atol=0.8)
    spread = history.local_air_mps - np.array([[3.0], [-4.0], [0.0]])
    assert 0.2 < spread.std() < 0.8
    np.testing.assert_allclose(history.velocity_mps - history.local_air_mps, history.air_velocity_mps)


def test_the_gusts_met_are_those_of_a_field_that_drifts_with_the_mean_wind() -> None:
    gusty = replace(STILL, sigma_mps=0.5)
    history = _fly((Segment(Leg.GROUND_CIRCLE, 60.0),), MeanWind(3.0, -4.0, exponent=0.0), gusty)
    wind = np.array([[3.0], [-4.0], [0.0]])
    field = GustField([gusty], [np.random.default_rng(5)])
    met = field.along(0, history.position_m - wind * history.time_s)
    np.testing.assert_allclose(history.local_air_mps, met + wind, atol=1e-4)


def test_the_wind_has_a_power_law_aloft_and_a_log_law_near_the_ground() -> None:
    factor = wind_factor(np.array([10.0, 100.0, 230.0]), 0.2)
    np.testing.assert_allclose(factor, [0.1**0.2, 1.0, 2.3**0.2])
    # 50 m over 10 m with exponent 1/7, and 1 m over 10 m over grass
    near = wind_factor(np.array([1.0, 10.0, 50.0]), 1.0 / 7.0)
    assert near[0] / near[1] == pytest.approx(np.log(1.0 / 0.03) / np.log(10.0 / 0.03))
    assert near[2] / near[1] == pytest.approx(5.0 ** (1.0 / 7.0))


def test_a_drifting_wind_moves_by_its_rate() -> None:
    wind = MeanWind(4.0, 0.0, exponent=0.0, drift_east_mps2=0.25 / 60.0)
    history = _fly((Segment(Leg.STRAIGHT, 120.0),), wind)
    assert history.local_air_mps[1, -1] == pytest.approx(0.5, abs=0.01)


def test_take_off_and_landing_leave_and_meet_the_ground() -> None:
    segments = (
        Segment(Leg.REST, 10.0),
        Segment(Leg.ROLL, 5.0),
        Segment(Leg.STRAIGHT, 60.0),
        Segment(Leg.LAND, 80.0, height_m=-10.0),
        Segment(Leg.REST, 5.0),
    )
    history = _fly(segments, MeanWind(-3.0, 0.0), heading=0.0)
    airborne = np.flatnonzero(~history.on_ground)
    assert history.time_s[airborne[0]] == pytest.approx(15.0, abs=0.1)
    assert np.all(np.diff(airborne) == 1)
    assert history.height_m[airborne].max() == pytest.approx(100.0, abs=3.0)
    assert np.all(history.velocity_mps[:, history.time_s < 9.9] == 0.0)
    assert np.linalg.norm(history.velocity_mps[:, -1]) == 0.0
    assert history.height_m[-1] == 0.0

from typing import SupportsFloat

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.airdata.wind_triangle import (
    air_velocity_from_ground_velocity,
    components_from_direction,
    direction_from_components,
    ground_speed_from_track,
    ground_velocity_from_heading,
    speed_from_components,
    wind_components_from_direction,
    wind_from_direction,
)
from tests.unit.airdata.property_settings import repeatable

directions = st.floats(0.0, 360.0, exclude_max=True)
speeds = st.floats(0.1, 120.0)
winds = st.floats(-40.0, 40.0)


def angle_between(one_deg: SupportsFloat, other_deg: SupportsFloat) -> float:
    return abs((float(one_deg) - float(other_deg) + 180.0) % 360.0 - 180.0)


@pytest.mark.parametrize(
    ("north", "east", "direction"),
    [(1, 0, 0), (1, 1, 45), (0, 1, 90), (-1, 1, 135), (-1, 0, 180), (-1, -1, 225), (0, -1, 270), (1, -1, 315)],
)
def test_directions_run_clockwise_from_north(north: float, east: float, direction: float) -> None:
    assert direction_from_components(north, east) == pytest.approx(direction, abs=1e-12)
    # the wind that blows towards a direction comes from the opposite one
    assert angle_between(wind_from_direction(north, east), direction) == pytest.approx(180.0, abs=1e-12)


def test_a_hair_west_of_north_is_not_360() -> None:
    assert direction_from_components(1.0, -1e-20) == 0.0
    assert 359.9 < direction_from_components(1.0, -1e-4) < 360.0


def test_calm_air_and_standing_still_have_no_direction() -> None:
    assert np.isnan(direction_from_components([0.0, -0.0], [0.0, -0.0])).all()
    assert np.isnan(wind_from_direction(0.0, 0.0))


@repeatable
@given(speeds, directions)
def test_components_round_trip(speed: float, direction: float) -> None:
    components = components_from_direction(speed, direction)
    assert speed_from_components(*components) == pytest.approx(speed, rel=1e-14)
    assert angle_between(direction_from_components(*components), direction) < 1e-10


@repeatable
@given(speeds, directions)
def test_wind_components_round_trip(speed: float, wind_from: float) -> None:
    components = wind_components_from_direction(speed, wind_from)
    assert speed_from_components(*components) == pytest.approx(speed, rel=1e-14)
    assert angle_between(wind_from_direction(*components), wind_from) < 1e-10


def test_west_wind_blows_towards_east() -> None:
    north, east = wind_components_from_direction(10.0, 270.0)
    assert north == pytest.approx(0.0, abs=1e-14)
    assert east == pytest.approx(10.0)


def test_vertical_speed_counts() -> None:
    assert speed_from_components(2.0, 3.0, 6.0) == 7.0
    assert speed_from_components(3.0, 4.0) == 5.0


@repeatable
@given(directions, speeds, winds, winds)
def test_air_velocity_undoes_ground_velocity(heading: float, airspeed: float, north: float, east: float) -> None:
    ground = ground_velocity_from_heading(heading, airspeed, north, east)
    air = air_velocity_from_ground_velocity(*ground, north, east)
    assert speed_from_components(*air) == pytest.approx(airspeed, abs=1e-12)
    assert angle_between(direction_from_components(*air), heading) < 1e-8


@repeatable
@given(directions, speeds, winds, winds)
def test_held_track_closes_the_triangle(track: float, airspeed: float, north: float, east: float) -> None:
    ground_speed = ground_speed_from_track(track, airspeed, north, east)
    if np.isnan(ground_speed):
        across = abs(east * np.cos(np.deg2rad(track)) - north * np.sin(np.deg2rad(track)))
        assert across >= airspeed or np.hypot(north, east) >= airspeed
        return
    ground = components_from_direction(ground_speed, track)
    air = air_velocity_from_ground_velocity(*ground, north, east)
    assert speed_from_components(*air) == pytest.approx(airspeed, rel=1e-9)


def test_track_that_cannot_be_held() -> None:
    # 25 m/s of wind across, or against, an aircraft that flies 20
    assert np.isnan(ground_speed_from_track(0.0, 20.0, 0.0, 25.0))
    assert np.isnan(ground_speed_from_track(0.0, 20.0, -25.0, 0.0))
    assert ground_speed_from_track(0.0, 20.0, 25.0, 0.0) == pytest.approx(45.0)
    assert ground_speed_from_track(0.0, 20.0, -20.0, 0.0) == pytest.approx(0.0)


def test_a_circle_in_strong_wind_stays_a_circle_about_the_wind() -> None:
    # in the plane of the velocity vector, whatever the ground track does
    headings = np.arange(0.0, 360.0, 7.0)
    ground = ground_velocity_from_heading(headings, 15.0, -18.0, 6.0)
    radius = speed_from_components(*air_velocity_from_ground_velocity(*ground, -18.0, 6.0))
    np.testing.assert_allclose(radius, 15.0, rtol=1e-14)
    tracks = direction_from_components(*ground)
    assert np.ptp(tracks) < 180.0

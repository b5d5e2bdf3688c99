"""The wind triangle itself against worked examples: forwards, no fit."""

import numpy as np
import pytest

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
from tests.reference.printed import agrees, half_unit


@pytest.mark.parametrize(
    ("airspeed", "wind_speed", "wind_from", "headings", "ground_speeds"),
    [
        # K. Horton, newsgroup post, 7 January 2004: headings north and south, printed 102, 102
        (100.0, 20.0, 270.0, (360, 180), ("102", "102")),
        # the same, headings 300 and 120: printed 83.3, 117.7
        (100.0, 20.0, 270.0, (300, 120), ("83.3", "117.7")),
        # the same, headings 305 and 120: printed 84.4 and "177.7", a misprint for 117.7
        (100.0, 20.0, 270.0, (305, 120), ("84.4", "117.7")),
        # Kitplanes, "Finding TAS from GPS Data": printed 102, 120, 102, 80
        (100.0, 20.0, 270.0, (0, 90, 180, 270), ("102", "120", "102", "80")),
        # closed form of the same
        (100.0, 20.0, 270.0, (0, 90, 180, 270), ("101.9804", "120.0000", "101.9804", "80.0000")),
        (100.0, 20.0, 270.0, (300, 305, 120), ("83.2820", "84.4002", "117.7459")),
        # constructed, closed form
        (105.0, 18.0, 250.0, (40, 160, 280), ("120.923844", "106.531685", "89.863363")),
        (20.0, 6.0, 315.0, (0, 120, 240), ("16.318529", "25.842256", "19.336066")),
        (22.0, 7.0, 200.0, (0, 90, 180), ("28.677959", "25.265435", "15.606879")),
        (105.0, 18.0, 250.0, (0, 90, 180), ("112.435920", "122.069808", "100.280426")),
    ],
)
def test_ground_speeds_on_headings(
    airspeed: float, wind_speed: float, wind_from: float, headings: tuple[float, ...], ground_speeds: tuple[str, ...]
) -> None:
    wind = wind_components_from_direction(wind_speed, wind_from)
    computed = speed_from_components(*ground_velocity_from_heading(headings, airspeed, *wind))
    assert [agrees(speed, figure) for speed, figure in zip(computed, ground_speeds, strict=True)] == [True] * len(
        headings
    )


def test_tracks_of_the_horseshoe_example() -> None:
    # constructed: 22 m/s on headings north, east, south in 7 m/s from 200
    velocity = ground_velocity_from_heading((0, 90, 180), 22.0, *wind_components_from_direction(7.0, 200.0))
    tracks = direction_from_components(*velocity)
    assert [agrees(t, f) for t, f in zip(tracks, ("4.7888", "74.9092", "171.1758"), strict=True)] == [True] * 3


@pytest.mark.parametrize(
    ("airspeed", "wind_speed", "wind_from", "tracks", "ground_speeds"),
    [
        # P. K. Sanchez, newsgroup post, 11 September 2004: printed 76.5, 87.9, 128.7
        (100.0, 30.0, 45.0, (0, 120, 240), ("76.5", "87.9", "128.7")),
        (100.0, 30.0, 45.0, (0, 120, 240), ("76.511", "87.945", "128.676")),
        # constructed, closed form
        (100.0, 20.0, 270.0, (0, 90, 180, 270), ("97.979590", "120", "97.979590", "80")),
        (100.0, 20.0, 240.0, (0, 90, 180, 270), ("108.488578", "116.819252", "88.488578", "82.178236")),
        (20.0, 5.0, 300.0, (0, 90, 180, 270), ("17.025624", "24.173262", "22.025624", "15.513008")),
    ],
)
def test_ground_speeds_on_tracks(
    airspeed: float, wind_speed: float, wind_from: float, tracks: tuple[float, ...], ground_speeds: tuple[str, ...]
) -> None:
    wind = wind_components_from_direction(wind_speed, wind_from)
    computed = ground_speed_from_track(tracks, airspeed, *wind)
    assert [agrees(speed, figure) for speed, figure in zip(computed, ground_speeds, strict=True)] == [True] * len(
        tracks
    )


def test_headings_of_the_tracks_example() -> None:
    # P. K. Sanchez, 2004: printed headings 12.2, 103.2, 244.5; closed form 12.247, 103.155, 244.453
    tracks = np.array([0.0, 120.0, 240.0])
    wind = wind_components_from_direction(30.0, 45.0)
    ground_speed = ground_speed_from_track(tracks, 100.0, *wind)
    air = air_velocity_from_ground_velocity(*components_from_direction(ground_speed, tracks), *wind)
    headings = direction_from_components(*air)
    assert [agrees(h, f) for h, f in zip(headings, ("12.247", "103.155", "244.453"), strict=True)] == [True] * 3
    assert speed_from_components(*air) == pytest.approx(100.0, rel=1e-14)


def test_headings_and_airspeed_of_a_three_leg_example() -> None:
    # D. Gray, "Using GPS to accurately establish TAS", June 1998, quoted: ground speeds 140, 112, 120 on tracks 192,
    # 283, 20; printed airspeed 130, wind 20.6 from 314.8, headings 200, 287.8, 11.7; at full precision as below
    ground = components_from_direction((140.0, 112.0, 120.0), (192.0, 283.0, 20.0))
    air = air_velocity_from_ground_velocity(*ground, *wind_components_from_direction(20.6334, 314.758))
    headings = direction_from_components(*air)
    assert headings == pytest.approx([199.67, 287.79, 11.71], abs=half_unit("0.01"))
    assert speed_from_components(*air) == pytest.approx(129.9985, abs=5e-4)


@pytest.mark.parametrize(
    ("heading", "airspeed", "north", "east", "ground_speed", "track"),
    # constructed set S1: wind towards north -2.5, east +4.0 m/s
    [
        (0, 18, "15.500000", "4.000000", "16.007811", "14.47029"),
        (45, 22, "13.056349", "19.556349", "23.514231", "56.27185"),
        (90, 18, "-2.500000", "22.000000", "22.141590", "96.48307"),
        (135, 22, "-18.056349", "19.556349", "26.617335", "132.71625"),
        (180, 18, "-20.500000", "4.000000", "20.886599", "168.95906"),
        (225, 22, "-18.056349", "-11.556349", "21.437839", "212.61989"),
        (270, 18, "-2.500000", "-14.000000", "14.221463", "259.87533"),
        (315, 22, "13.056349", "-11.556349", "17.436096", "318.48753"),
    ],
)
def test_constructed_set_s1(
    heading: float, airspeed: float, north: str, east: str, ground_speed: str, track: str
) -> None:
    velocity = ground_velocity_from_heading(heading, airspeed, -2.5, 4.0)
    assert agrees(velocity[0], north)
    assert agrees(velocity[1], east)
    assert agrees(speed_from_components(*velocity), ground_speed)
    assert agrees(direction_from_components(*velocity), track)


def test_wind_of_set_s1_as_speed_and_direction() -> None:
    assert agrees(speed_from_components(-2.5, 4.0), "4.716991")
    assert agrees(wind_from_direction(-2.5, 4.0), "302.00538")


def test_mean_ground_speeds_over_uniform_headings() -> None:
    # closed form (complete elliptic integral E): mean ground speed over airspeed for wind of 0.1 to 0.5 of the airspeed
    headings = np.arange(0.0, 360.0, 0.5)
    figures = ("1.002502", "1.010025", "1.022630", "1.040417", "1.063544")
    for wind, figure in zip((0.1, 0.2, 0.3, 0.4, 0.5), figures, strict=True):
        speeds = speed_from_components(*ground_velocity_from_heading(headings, 1.0, wind, 0.0))
        assert agrees(np.mean(speeds), figure)
        assert np.mean(speeds**2) == pytest.approx(1.0 + wind**2, rel=1e-13)

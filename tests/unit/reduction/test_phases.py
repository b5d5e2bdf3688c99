"""Rest, rolling and flight told apart."""

from dataclasses import replace

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from service.domain.log import DecodedLog, GroundContactSamples
from service.reduction.phases import LONGEST_ROLL_S, find_ground_phases
from tests.unit.flown_circles import Flown, log_of


def _gps(log: DecodedLog, north: FloatArray, east: FloatArray) -> DecodedLog:
    assert log.gps is not None
    return replace(log, gps=replace(log.gps, velocity_north_mps=north, velocity_east_mps=east))


def test_rest_before_and_after() -> None:
    phases = find_ground_phases(log_of(Flown(rest_s=20.0)))
    assert phases.rest_s == pytest.approx(np.array([[0.0, 19.5], [201.0, 220.0]]), abs=1.5)
    # it is in the air two metres above the resting height
    assert phases.ground_s == pytest.approx(np.array([[0.0, 20.5], [199.5, 220.0]]), abs=1.5)


def test_no_rest_in_a_log_that_begins_and_ends_in_the_air() -> None:
    phases = find_ground_phases(log_of(Flown()))
    assert phases.rest_s.shape == phases.ground_s.shape == (0, 2)


def test_hanging_in_a_headwind_is_no_rest() -> None:
    # in wind of its own airspeed the aircraft stands over ground once a turn
    phases = find_ground_phases(log_of(Flown(wind_north_mps=17.0, wind_east_mps=0.0, turn_s=60.0)))
    assert phases.rest_s.shape == (0, 2)


def test_a_long_stand_between_two_flights_is_a_rest() -> None:
    log = log_of(Flown(turns=8, wind_north_mps=0.0, wind_east_mps=0.0))
    assert log.gps is not None
    stands = (log.gps.time_s > 100.0) & (log.gps.time_s < 130.0)
    north, east = (np.where(stands, 0.1, values) for values in (log.gps.velocity_north_mps, log.gps.velocity_east_mps))
    (rest,) = find_ground_phases(_gps(log, north, east)).rest_s
    assert rest == pytest.approx([101.0, 129.0], abs=1.0)
    shorter = (log.gps.time_s > 100.0) & (log.gps.time_s < 105.0)
    north, east = (np.where(shorter, 0.1, values) for values in (log.gps.velocity_north_mps, log.gps.velocity_east_mps))
    assert find_ground_phases(_gps(log, north, east)).rest_s.shape == (0, 2)


def test_the_recorders_own_ground_contact_is_believed() -> None:
    log = log_of(Flown(rest_s=20.0))
    contact = GroundContactSamples(np.array([0.0, 30.0, 190.0]), np.array([True, False, True]))
    phases = find_ground_phases(replace(log, ground_contact=contact))
    assert phases.ground_s[0] == pytest.approx([0.0, 30.0])
    assert phases.ground_s[1, 0] == pytest.approx(190.0)
    assert phases.rest_s[0] == pytest.approx([0.0, 19.0], abs=1.5)


def test_rolling_without_a_known_height_ends_with_speed_and_time() -> None:
    log = log_of(Flown(rest_s=20.0), static=None)
    assert log.gps is not None
    phases = find_ground_phases(replace(log, gps=replace(log.gps, altitude_m=None)))
    assert phases.ground_s[0] == pytest.approx([0.0, 20.3], abs=0.5)
    assert np.all(np.diff(phases.ground_s, axis=1) <= 20.0 + LONGEST_ROLL_S)


@pytest.mark.parametrize("samples", [0, 1, 2])
def test_too_little_gps_tells_nothing(samples: int) -> None:
    log = log_of(Flown())
    assert log.gps is not None
    nothing = np.full(log.gps.time_s.size, np.nan)
    nothing[:samples] = 0.0
    assert find_ground_phases(_gps(log, nothing, nothing)).ground_s.shape == (0, 2)
    assert find_ground_phases(replace(log, gps=None)).ground_s.shape == (0, 2)

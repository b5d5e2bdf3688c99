"""Loiters found in the plane of the ground velocity."""

import numpy as np
import pytest

from service.airdata.headings import heading_coverage
from service.domain.codes import Direction
from service.domain.results import AirDataSeries
from service.domain.settings import Window
from service.reduction.loiters import LONGEST_LOITER_S, find_loiters, joint_coverage
from service.reduction.series import build_series
from tests.unit.flown_circles import Flown, log_of
from tests.unit.reduction.constructed import series_of

NOWHERE = np.empty((0, 2))


def series_flown(flown: Flown) -> AirDataSeries:
    log = log_of(flown)
    assert log.probe is not None
    return build_series(log, log.probe, NOWHERE, NOWHERE)


def turning(rate_deg_per_s: np.ndarray, step_s: float = 0.2, wind: tuple[float, float] = (2.0, 3.0)) -> AirDataSeries:
    """17 m/s with the heading that a turn rate (n,) leads to."""
    heading = np.radians(np.cumsum(rate_deg_per_s) * step_s)
    return series_of(
        np.full(heading.size, 170.0),
        step_s,
        velocity_north_mps=17.0 * np.cos(heading) + wind[0],
        velocity_east_mps=17.0 * np.sin(heading) + wind[1],
    )


@pytest.mark.parametrize(
    ("headings", "covered"),
    [
        ((0.0, 120.0, 240.0), 240.0),
        ((0.0, 90.0, 180.0, 270.0), 270.0),
        ((350.0, 10.0), 20.0),
        ((0.0, 90.0, 180.0), 180.0),
        ((-10.0, 370.0, 730.0), 20.0),
        ((5.0,), 0.0),
        ((), 0.0),
    ],
)
def test_coverage_is_the_circle_less_the_largest_gap(headings: tuple[float, ...], covered: float) -> None:
    assert heading_coverage(np.array(headings)) == pytest.approx(covered)


@pytest.mark.parametrize("wind", [(0.0, 0.0), (6.0, -3.0), (17.0, 0.0), (-20.0, 25.0)])
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_two_loiters_with_a_leg_between(wind: tuple[float, float], sign: float) -> None:
    rate = sign * np.concatenate([np.full(450, 12.0), np.zeros(200), np.full(450, -12.0)])
    first, second = find_loiters(turning(rate, wind=wind))
    ways = (Direction.RIGHT, Direction.LEFT) if sign > 0 else (Direction.LEFT, Direction.RIGHT)
    assert (first.direction, second.direction) == ways
    for loiter, start_s in ((first, 0.0), (second, 130.0)):
        assert loiter.start_s == pytest.approx(start_s, abs=4.0)
        assert loiter.end_s == pytest.approx(start_s + 90.0, abs=4.0)
        assert loiter.turns == pytest.approx(3.0, abs=0.2)
        assert loiter.true_airspeed_mps == pytest.approx(17.0, rel=0.03)
        assert loiter.used


def test_a_long_loiter_is_cut_into_equal_parts() -> None:
    parts = find_loiters(turning(np.full(6000, 12.0)))
    lasting = [part.end_s - part.start_s for part in parts]
    assert len(parts) == 3
    assert max(lasting) <= LONGEST_LOITER_S
    assert max(lasting) - min(lasting) < 1.0


def test_a_straight_leg_is_a_pattern_that_covers_little() -> None:
    series = turning(np.zeros(1500))
    (pattern,) = find_loiters(series)
    assert pattern.direction is Direction.STRAIGHT
    assert joint_coverage(series, [pattern]) < 10.0


@pytest.mark.parametrize("seed", range(5))
def test_gusts_on_a_straight_leg_are_no_circle(seed: int) -> None:
    # a slow gust that goes round in the plane of the velocity, half a metre per second wide
    rng = np.random.default_rng(seed)
    time_s = 0.2 * np.arange(1500)
    phase = 2.0 * np.pi * time_s / 40.0 + rng.uniform(0.0, 6.0)
    series = series_of(
        np.full(1500, 170.0),
        0.2,
        velocity_north_mps=14.0 + 0.5 * np.cos(phase) + rng.normal(0.0, 0.02, 1500),
        velocity_east_mps=3.0 + 0.5 * np.sin(phase) + rng.normal(0.0, 0.02, 1500),
    )
    loiters = find_loiters(series)
    assert {loiter.direction for loiter in loiters} == {Direction.STRAIGHT}
    assert joint_coverage(series, loiters) < 30.0


def test_legs_at_right_angles_are_one_pattern() -> None:
    series = series_flown(Flown(headings_deg=(0.0, 90.0, 180.0, 270.0), turn_s=60.0))
    (pattern,) = find_loiters(series)
    assert pattern.direction is Direction.STRAIGHT
    assert joint_coverage(series, [pattern]) >= 265.0


def test_a_gap_in_the_gps_ends_a_loiter() -> None:
    series = turning(np.full(1800, 12.0))
    later = np.where(series.gps_time_s > 180.0, series.gps_time_s + 60.0, series.gps_time_s)
    loiters = find_loiters(
        series_of(
            np.full(1800, 170.0),
            0.2,
            gps_time_s=later,
            velocity_north_mps=series.velocity_north_mps,
            velocity_east_mps=series.velocity_east_mps,
        )
    )
    assert all(loiter.end_s <= 181.0 or loiter.start_s >= 239.0 for loiter in loiters)
    assert len(loiters) >= 2


def test_windows_are_taken_as_given() -> None:
    series = turning(np.full(900, 12.0))
    first, second = find_loiters(series, [Window(10.0, 50.0), Window(60.0, 70.0)])
    assert (first.start_s, first.end_s) == (10.0, 50.0)
    assert second.direction is Direction.STRAIGHT  # a third of a turn
    assert find_loiters(series, [Window(500.0, 600.0)]) == ()


def test_time_on_the_ground_is_no_loiter() -> None:
    series = turning(np.full(900, 12.0))
    grounded = series_of(
        series.reading_pa,
        0.2,
        velocity_north_mps=series.velocity_north_mps,
        velocity_east_mps=series.velocity_east_mps,
        gps_on_ground=np.ones(900, dtype=bool),
    )
    assert find_loiters(grounded) == ()
    assert joint_coverage(grounded, []) == 0.0

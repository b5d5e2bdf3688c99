"""A leak after the fit: a step of the scale is found where it is, and gusts alone are not taken for one."""

from dataclasses import dataclass, field, replace

import numpy as np
import pytest

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import Direction, FaultKind, ZeroOffsetSource
from service.domain.results import AirDataSeries, Estimate, Fault, FittedPoints, Loiter
from service.reduction.faults import find_scale_step
from service.reduction.faults.scale_levels import levels_of_spans
from tests.unit.reduction.circling import AIRSPEED_MPS, TURN_S, circling

DURATION_S = 384.0
BLOCK_S = TURN_S / 20.0
LOITERS = tuple(
    Loiter(start_s, start_s + DURATION_S / 2, 6.0, Direction.RIGHT, 360.0, AIRSPEED_MPS, True)
    for start_s in (0.0, DURATION_S / 2)
)


@dataclass(frozen=True)
class Fit:
    """What the search asks of a fit."""

    pressure_scale: float = 1.0
    zero_offset_pa: float = 0.0
    covariance: FloatArray = field(default_factory=lambda: np.diag([1e-4, 1.0]))
    zero_offset_source: ZeroOffsetSource = ZeroOffsetSource.PRIOR
    gps_delay_s: Estimate | None = None


LEAK = 0.9
"""Of the pressure: 5 % of the speed."""


def flight(
    seed: int, leak: tuple[float, float] | None = None, gust_mps: float = 0.3
) -> tuple[AirDataSeries, FittedPoints]:
    """Series and fitted points of circles at one airspeed through gusts, with a leak over a span."""
    whole = circling(seed, duration_s=DURATION_S, gust_mps=gust_mps, noise_pa=0.5)
    time_s, reading = whole.time_s, whole.series.reading_pa
    if leak is not None:
        reading = np.where((time_s >= leak[0]) & (time_s <= leak[1]), LEAK * reading, reading)
    count = round(DURATION_S / BLOCK_S)
    block = (time_s / BLOCK_S).astype(int)
    speed = np.bincount(block, np.sqrt(2.0 * np.maximum(reading, 0.0) / 1.225), count) / np.bincount(
        block, minlength=count
    )
    middle = np.arange(count, dtype=np.float64) * BLOCK_S + 0.5 * BLOCK_S
    points = FittedPoints(
        time_s=middle,
        loiter=np.floor(middle / (DURATION_S / 2)),
        heading_deg=np.mod(360.0 * middle / TURN_S, 360.0),
        probe_true_airspeed_mps=speed,
        wind_corrected_speed_mps=np.full(count, np.median(speed)),
    )
    return whole.reading(reading), points


def told(
    series: AirDataSeries | None, points: FittedPoints, fit: Fit | None = None, usable: BoolArray | None = None
) -> Fault | None:
    if series is not None and usable is None:
        usable = np.ones(series.time_s.size, dtype=bool)
    return find_scale_step(points, LOITERS, fit or Fit(), series=series, usable=usable)


@pytest.mark.parametrize("gust_mps", [0.15, 0.4, 0.9])
def test_gusts_alone_are_no_leak(gust_mps: float) -> None:
    for seed in range(8):
        series, points = flight(seed, gust_mps=gust_mps)
        assert told(series, points) is None
        assert told(None, points) is None


@pytest.mark.parametrize("start_s", [100.0, 230.0])
def test_a_leak_that_stays_is_found_at_its_edge(start_s: float) -> None:
    fault = told(*flight(3, (start_s, DURATION_S)))
    assert fault is not None
    assert fault.fault is FaultKind.LEAK
    assert fault.start_s == pytest.approx(start_s, abs=0.5)
    assert fault.end_s == pytest.approx(DURATION_S, abs=0.2)
    assert "10 % less" in fault.message or "9 % less" in fault.message or "11 % less" in fault.message


def test_a_leak_that_closes_is_found_between_its_edges() -> None:
    fault = told(*flight(4, (140.0, 220.0)))
    assert fault is not None
    assert fault.start_s == pytest.approx(140.0, abs=0.5)
    assert fault.end_s == pytest.approx(220.0, abs=0.5)


def test_a_leak_from_take_off_that_closes_is_the_lower_part() -> None:
    fault = told(*flight(5, (0.0, 150.0)))
    assert fault is not None
    assert fault.start_s == 0.0
    assert fault.end_s == pytest.approx(150.0, abs=0.5)


def test_without_the_readings_the_level_alone_tells_it() -> None:
    _, points = flight(6, (200.0, DURATION_S), gust_mps=0.15)
    fault = told(None, points)
    assert fault is not None
    assert fault.start_s == pytest.approx(200.0, abs=15.0)
    assert fault.end_s == LOITERS[-1].end_s


def test_a_change_of_airspeed_is_no_leak() -> None:
    series, points = flight(7)
    slower = np.where(points.time_s > 200.0, 0.8, 1.0)
    reading = np.where(series.time_s > 200.0, 0.64, 1.0) * series.reading_pa
    changed = replace(
        points,
        probe_true_airspeed_mps=slower * points.probe_true_airspeed_mps,
        wind_corrected_speed_mps=slower * points.wind_corrected_speed_mps,
    )
    assert told(replace(series, reading_pa=reading), changed) is None


def test_a_late_gps_moves_the_level_to_the_probe_s_clock() -> None:
    series, points = flight(3, (230.0, DURATION_S))
    late = replace(points, time_s=points.time_s + 0.4)
    fit = Fit(gps_delay_s=Estimate(0.4, 0.05, (0.3, 0.5)))
    fault = find_scale_step(late, LOITERS, fit, series=series)
    assert fault is not None
    assert fault.start_s == pytest.approx(230.0, abs=0.5)


@pytest.mark.parametrize("overlooked_s", [0.0, 0.2, 0.3, 0.5])
@pytest.mark.parametrize("seed", [0, 3, 4])
def test_what_another_fault_leaves_at_its_edges_is_no_leak(overlooked_s: float, seed: int) -> None:
    """A blocked probe whose first samples of sinking were overlooked."""
    series, points = flight(seed)
    time_s = series.time_s
    blocked = (time_s >= 150.0) & (time_s <= 190.0)
    reading = np.where(blocked, series.reading_pa * np.exp(-(time_s - 150.0) / 1.5), series.reading_pa)
    usable = ~(blocked & (time_s >= 150.0 + overlooked_s))
    within = (points.time_s > 150.0) & (points.time_s < 190.0)
    kept = FittedPoints(*(getattr(points, name)[~within] for name in FittedPoints.__slots__))
    assert told(replace(series, reading_pa=reading), kept, usable=usable) is None


def test_a_leak_that_the_fit_took_for_a_wrong_zero_is_found_by_its_edge() -> None:
    """The fit gave the zero up and found another, so far off that the step hardly shows in its speeds."""
    series, points = flight(3, (230.0, DURATION_S))
    zero_pa, scale = -900.0, 0.165
    speed = points.probe_true_airspeed_mps
    flattened = np.sqrt(speed**2 * scale - 2.0 * scale * zero_pa / 1.225)
    confused = replace(points, probe_true_airspeed_mps=flattened, wind_corrected_speed_mps=np.full_like(speed, 17.0))
    fit = Fit(scale, zero_pa, np.diag([0.01, 1e4]), ZeroOffsetSource.FITTED)
    fault = told(series, confused, fit)
    assert fault is not None
    assert fault.start_s == pytest.approx(230.0, abs=0.5)
    assert "10 % less" in fault.message or "9 % less" in fault.message or "11 % less" in fault.message


def test_a_zero_that_the_flight_rightly_contradicts_is_no_leak() -> None:
    """The sensor was said to be zeroed, and was 40 Pa off; the second loiter was flown faster."""
    series, points = flight(11)
    faster = np.interp(series.time_s, [150.0, 200.0], [1.0, 1.4])
    reading = series.reading_pa * faster**2 + 40.0
    at_points = np.interp(points.time_s, series.time_s, faster)
    right = replace(
        points,
        probe_true_airspeed_mps=points.probe_true_airspeed_mps * at_points,
        wind_corrected_speed_mps=points.wind_corrected_speed_mps * at_points,
    )
    fit = Fit(1.0, 40.0, np.diag([1e-4, 4.0]), ZeroOffsetSource.FITTED)
    assert told(replace(series, reading_pa=reading), right, fit) is None


def test_too_few_points_tell_nothing() -> None:
    series, points = flight(8, (10.0, 30.0))
    few = FittedPoints(*(getattr(points, name)[:20] for name in FittedPoints.__slots__))
    assert told(series, few) is None


def test_the_level_of_a_known_step_is_recovered_within_its_variance() -> None:
    _, points = flight(9, (DURATION_S / 2, DURATION_S))
    step, variance = levels_of_spans(points).between()
    boundary, last = step.shape[0] // 2, step.shape[0] - 1
    assert step[boundary, last] == pytest.approx(np.log(LEAK) / 2, abs=3.0 * np.sqrt(variance[boundary, last]))
    assert np.sqrt(variance[boundary, last]) < 0.02


@pytest.mark.parametrize("late", [-0.4, 0.0, 0.25, 0.5])
def test_a_point_that_holds_the_edge_itself_does_not_shrink_the_step(late: float) -> None:
    """The leak opens before or within a point, which then shows a part of it."""
    _, points = flight(12)
    points = FittedPoints(*(getattr(points, name)[:150] for name in FittedPoints.__slots__))
    boundary, step = 100, -0.05
    leaking = np.where(np.arange(points.time_s.size) < boundary, 0.0, 1.0)
    leaking[boundary] -= max(late, 0.0)
    leaking[boundary - 1] += max(-late, 0.0)
    speed = points.wind_corrected_speed_mps
    levels = levels_of_spans(replace(points, probe_true_airspeed_mps=speed * (1.0 + step * leaking)))
    opens_late = np.zeros(points.time_s.size + 1)
    opens_late[boundary] = late
    found, _ = levels.between(opens_late)
    assert found[boundary, -1] == pytest.approx(step, rel=1e-6)

"""Each fault before the fit: found in its span, its samples marked; sound readings of many sensors left in peace."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.log import ReadingGap, SensorNote, StaticSamples
from service.domain.results import AirDataSeries, Fault, FaultReport
from service.reduction.faults import CHECKS, find_faults
from service.reduction.faults.rough_wind import speed_through_air
from tests.unit.reduction.circling import (
    AIRSPEED_MPS,
    PASCAL_PER_METRE,
    SEA_LEVEL_PA,
    WIND_EAST_MPS,
    WIND_NORTH_MPS,
    Circling,
    circling,
)

START_S, END_S = 150.0, 200.0
NEAR_S = 3.0


def report_of(flight: Circling, series: AirDataSeries | None = None, **given: object) -> FaultReport:
    return find_faults(series or flight.series, static=given.pop("static", flight.static), **given)  # type: ignore[arg-type]


def inside(flight: Circling) -> BoolArray:
    return (flight.time_s >= START_S) & (flight.time_s <= END_S)


def only_fault(report: FaultReport, kind: FaultKind) -> Fault:
    (fault,) = report.faults
    assert fault.fault is kind
    return fault


def assert_span(fault: Fault, start_s: float = START_S, end_s: float = END_S, near_s: float = NEAR_S) -> None:
    assert fault.start_s == pytest.approx(start_s, abs=near_s)
    assert fault.end_s == pytest.approx(end_s, abs=near_s)


def assert_marked(report: FaultReport, flight: Circling) -> None:
    """Nearly all samples of the span are marked, and hardly any outside of it."""
    within = inside(flight)
    assert report.probe_faulty[within].mean() > 0.9
    assert report.probe_faulty[~within].mean() < 0.03


def test_every_kind_but_the_leak_has_a_check() -> None:
    assert {kind for kinds, _ in CHECKS for kind in kinds} == set(FaultKind) - {FaultKind.LEAK}


# --- sound flights ---------------------------------------------------------------------------------------------------


def rounded(step_pa: float) -> Callable[[FloatArray], FloatArray]:
    return lambda reading: np.round(reading / step_pa) * step_pa


SOUND: dict[str, Circling] = {
    "plain": circling(),
    "calm": circling(2, gust_mps=0.15),
    "rough": circling(3, gust_mps=0.9),
    "once a second": circling(4, step_s=1.0),
    "after rest": circling(5, rest_s=40.0),
    "large zero": circling(6, zero_pa=115.0, compensated_zero=False),
    "venturi": circling(8, pressure_scale=0.1),
    "insensitive": circling(9, pressure_scale=5.0),
    "noisy": circling(10, noise_pa=6.0),
    "no static": circling(11, standard_static=True),
}


@pytest.mark.parametrize("name", SOUND)
def test_a_sound_flight_has_no_fault(name: str) -> None:
    flight = SOUND[name]
    report = report_of(flight)
    assert report.faults == ()
    assert not report.probe_faulty.any()
    assert not report.static_faulty.any()


@pytest.mark.parametrize("step_pa", [1.0, 2.0, 6.3])
@pytest.mark.parametrize("interval_s", [0.1, 1.0])
def test_a_coarsely_rounded_reading_is_not_frozen_or_saturated(step_pa: float, interval_s: float) -> None:
    for seed in range(5):
        flight = circling(seed, step_s=interval_s, gust_mps=0.25)
        assert report_of(flight, flight.reading(rounded(step_pa)(flight.series.reading_pa))).faults == ()


def test_a_slow_sensor_repeated_in_a_fast_log_is_not_frozen() -> None:
    flight = circling()
    assert report_of(flight, flight.reading(np.repeat(flight.series.reading_pa[::10], 10))).faults == ()


def test_a_quick_change_of_speed_is_no_spike_and_no_fault() -> None:
    flight = circling()
    faster = np.where(flight.time_s < 150.0, 1.0, (22.0 / AIRSPEED_MPS) ** 2)
    assert report_of(flight, flight.reading(flight.series.reading_pa * faster)).faults == ()


def test_the_rough_airspeed_is_good_to_a_metre_per_second() -> None:
    speed, known = speed_through_air(circling().series)
    assert known
    np.testing.assert_allclose(speed, AIRSPEED_MPS, atol=1.0)


def test_a_straight_flight_tells_no_wind() -> None:
    series = circling().series
    count = series.gps_time_s.size
    straight = replace(
        series,
        velocity_north_mps=np.full(count, 20.0) + np.random.default_rng(1).normal(0.0, 0.4, count),
        velocity_east_mps=np.random.default_rng(2).normal(0.0, 0.4, count),
    )
    speed, known = speed_through_air(straight)
    assert not known
    np.testing.assert_allclose(speed, 20.0, atol=2.5)


# --- frozen and saturated --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("interval_s", [0.1, 1.0])
def test_frozen_is_found_where_it_is(interval_s: float) -> None:
    flight = circling(step_s=interval_s)
    stuck = flight.series.reading_pa[np.flatnonzero(inside(flight))[0]]
    report = report_of(flight, flight.reading(np.where(inside(flight), stuck, flight.series.reading_pa)))
    assert_span(only_fault(report, FaultKind.FROZEN))
    assert_marked(report, flight)


def test_frozen_throughout_marks_every_sample() -> None:
    flight = circling()
    report = report_of(flight, flight.reading(np.full(flight.time_s.size, 171.3)))
    only_fault(report, FaultKind.FROZEN)
    assert report.probe_faulty.all()


def at_two_speeds(second_pa: float) -> tuple[Circling, AirDataSeries]:
    """A reading without noise that goes from one level to another, while the noisy GPS sees 1.3 times the speed."""
    flight = circling()
    ramp_s = [START_S, START_S + 6.0]
    faster = np.interp(flight.series.gps_time_s, ramp_s, [1.0, 1.3])
    series = replace(
        flight.reading(np.interp(flight.time_s, ramp_s, [177.0, second_pa])),
        velocity_north_mps=(flight.series.velocity_north_mps - WIND_NORTH_MPS) * faster + WIND_NORTH_MPS,
        velocity_east_mps=(flight.series.velocity_east_mps - WIND_EAST_MPS) * faster + WIND_EAST_MPS,
    )
    return flight, series


def test_a_reading_without_noise_that_goes_with_the_airspeed_is_not_frozen() -> None:
    assert report_of(*at_two_speeds(177.0 * 1.3**2)).faults == ()


@pytest.mark.parametrize("second_pa", [120.0, 190.0])
def test_a_reading_that_holds_levels_of_its_own_is_frozen(second_pa: float) -> None:
    report = report_of(*at_two_speeds(second_pa))
    assert {fault.fault for fault in report.faults} == {FaultKind.FROZEN}
    assert report.probe_faulty.mean() > 0.95


def test_the_same_reading_at_rest_is_no_fault() -> None:
    flight = circling(rest_s=60.0)
    assert (
        report_of(flight, flight.reading(np.where(flight.series.at_rest, 0.0, flight.series.reading_pa))).faults == ()
    )


def test_saturated_at_the_given_full_scale() -> None:
    flight = circling()
    report = report_of(
        flight, flight.reading(np.where(inside(flight), 500.0, flight.series.reading_pa)), full_scale_pa=500.0
    )
    fault = only_fault(report, FaultKind.SATURATED)
    assert_span(fault)
    assert "500.0 Pa" in fault.message
    assert_marked(report, flight)


def test_saturated_at_a_limit_that_nobody_told() -> None:
    flight = circling(gust_mps=0.6)
    limit = float(np.quantile(flight.series.reading_pa, 0.95))
    cut = np.minimum(flight.series.reading_pa, limit)
    report = report_of(flight, flight.reading(cut))
    assert {fault.fault for fault in report.faults} == {FaultKind.SATURATED}
    assert report.probe_faulty[cut == limit].all()


# --- no airflow ------------------------------------------------------------------------------------------------------


def noise(flight: Circling) -> FloatArray:
    return np.random.default_rng(99).normal(0.0, 0.7, flight.time_s.size)


@pytest.mark.parametrize(("zero_pa", "rest_s"), [(0.4, 0.0), (115.0, 40.0)])
def test_blocked_reads_its_zero_in_flight(zero_pa: float, rest_s: float) -> None:
    flight = circling(zero_pa=zero_pa, rest_s=rest_s, compensated_zero=rest_s == 0.0)
    sink = np.exp(-np.maximum(flight.time_s - START_S, 0.0) / 1.5)
    open_share = np.where(inside(flight), sink, 1.0)
    reading = (flight.series.reading_pa - zero_pa) * open_share + zero_pa + noise(flight)
    report = report_of(flight, flight.reading(reading))
    assert_span(only_fault(report, FaultKind.BLOCKED))
    assert_marked(report, flight)


def test_blocked_with_an_unknown_zero_is_a_drop_that_loses_the_gusts() -> None:
    flight = circling(zero_pa=90.0, compensated_zero=False)
    report = report_of(flight, flight.reading(np.where(inside(flight), 90.0 + noise(flight), flight.series.reading_pa)))
    assert_span(only_fault(report, FaultKind.BLOCKED))


@pytest.mark.parametrize("compensated", [True, False])
def test_blocked_throughout(compensated: bool) -> None:
    flight = circling(compensated_zero=compensated)
    report = report_of(flight, flight.reading(noise(flight) + (0.0 if compensated else 95.0)))
    only_fault(report, FaultKind.BLOCKED)
    assert report.probe_faulty.mean() > 0.9


def test_an_aircraft_that_stands_in_wind_is_not_blocked() -> None:
    flight = circling(rest_s=100.0, on_ground=np.zeros(3000, dtype=bool), at_rest=np.zeros(3000, dtype=bool))
    assert report_of(flight).faults == ()


@pytest.mark.parametrize("climb_mps", [0.0, 1.0, -1.0])
def test_trapped_follows_the_altitude(climb_mps: float) -> None:
    flight = circling()
    climbed = climb_mps * np.clip(flight.time_s - START_S, 0.0, END_S - START_S) * PASCAL_PER_METRE
    static_pa = flight.series.static_pressure_pa - climbed
    static = replace(flight.static, static_pressure_pa=flight.static.static_pressure_pa - climbed)
    first = np.flatnonzero(inside(flight))[0]
    closed = flight.series.reading_pa[first] + static_pa[first] - static_pa + noise(flight)
    series = flight.reading(np.where(inside(flight), closed, flight.series.reading_pa))
    report = report_of(flight, replace(series, static_pressure_pa=static_pa), static=static)
    assert_span(only_fault(report, FaultKind.TRAPPED))
    assert_marked(report, flight)


@pytest.mark.parametrize(("sink_mps", "lasting_s"), [(3.0, 10.0), (1.0, 20.0)])
def test_trapped_is_followed_from_level_flight_through_a_descent(sink_mps: float, lasting_s: float) -> None:
    """The level parts tell next to nothing of how the reading goes with the altitude; it passes its zero on the way."""
    flight = circling(2, pressure_scale=0.8, gust_mps=0.15)
    sunk = PASCAL_PER_METRE * sink_mps * np.clip(flight.time_s - 165.0, 0.0, lasting_s)
    static_pa = flight.series.static_pressure_pa + sunk
    static = replace(flight.static, static_pressure_pa=flight.static.static_pressure_pa + sunk)
    first = np.flatnonzero(inside(flight))[0]
    closed = flight.series.reading_pa[first] + (static_pa[first] - static_pa) / 0.8 + noise(flight)
    series = flight.reading(np.where(inside(flight), closed, flight.series.reading_pa))
    report = report_of(flight, replace(series, static_pressure_pa=static_pa), static=static)
    assert_span(only_fault(report, FaultKind.TRAPPED))
    assert_marked(report, flight)


def test_a_descent_of_a_sound_probe_is_no_fault() -> None:
    flight = circling(pressure_scale=0.8)
    sunk = PASCAL_PER_METRE * 3.0 * np.clip(flight.time_s - 180.0, 0.0, 10.0)
    series = replace(flight.series, static_pressure_pa=flight.series.static_pressure_pa + sunk)
    static = replace(flight.static, static_pressure_pa=flight.static.static_pressure_pa + sunk)
    assert report_of(flight, series, static=static).faults == ()


def test_quiet_air_alone_is_not_trapped() -> None:
    flight = circling(gust_mps=0.5)
    calm = circling(gust_mps=0.05)
    reading = np.where(inside(flight), calm.series.reading_pa, flight.series.reading_pa)
    assert report_of(flight, flight.reading(reading)).faults == ()


# --- swapped ---------------------------------------------------------------------------------------------------------


def speeding_up(flight: Circling, sign: float, zero_pa: float) -> AirDataSeries:
    """The flight, a fifth faster from its middle on: what tells swapped tubes from a negative raw zero."""
    factor = np.where(flight.time_s > 150.0, 1.2, 1.0)
    gps_factor = np.interp(flight.series.gps_time_s, flight.time_s, factor)
    north, east = flight.series.velocity_north_mps, flight.series.velocity_east_mps
    return replace(
        flight.reading(zero_pa + sign * flight.dynamic_pa * factor**2 + noise(flight)),
        velocity_north_mps=(north - WIND_NORTH_MPS) * gps_factor + WIND_NORTH_MPS,
        velocity_east_mps=(east - WIND_EAST_MPS) * gps_factor + WIND_EAST_MPS,
    )


@pytest.mark.parametrize(("zero_pa", "compensated"), [(1.0, True), (80.0, False)])
def test_swapped_reads_negative_in_flight(zero_pa: float, compensated: bool) -> None:
    flight = circling(compensated_zero=compensated)
    report = report_of(flight, speeding_up(flight, -1.0, zero_pa))
    only_fault(report, FaultKind.SWAPPED)
    assert report.probe_faulty.mean() > 0.95


def test_swapped_against_a_zero_read_at_rest() -> None:
    flight = circling(rest_s=40.0, zero_pa=115.0, compensated_zero=False)
    fault = only_fault(report_of(flight, flight.reading(230.0 - flight.series.reading_pa)), FaultKind.SWAPPED)
    assert_span(fault, 40.0, 300.0)


def test_a_negative_raw_zero_is_not_swapped() -> None:
    flight = circling(compensated_zero=False)
    assert report_of(flight, speeding_up(flight, 1.0, -400.0)).faults == ()


# --- spikes and dropouts ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("interval_s", [0.1, 1.0])
def test_only_the_spikes_are_marked(interval_s: float) -> None:
    flight = circling(step_s=interval_s)
    hit = np.zeros(flight.time_s.size, dtype=bool)
    hit[[50, 90, 91, 140, 200, 260]] = True
    sign = np.where(np.arange(hit.size) % 3 == 0, -1.0, 1.0)
    report = report_of(flight, flight.reading(flight.series.reading_pa + 90.0 * sign * hit))
    assert {fault.fault for fault in report.faults} == {FaultKind.SPIKES}
    np.testing.assert_array_equal(report.probe_faulty, hit)


@pytest.mark.parametrize("interval_s", [0.1, 1.0])
def test_spikes_of_a_loose_contact_are_told_as_one_fault(interval_s: float) -> None:
    flight = circling(step_s=interval_s, duration_s=900.0)
    hit = np.zeros(flight.time_s.size, dtype=bool)
    hit[(np.array([100.0, 131.0, 175.0, 198.0, 290.0, 330.0, 380.0, 470.0, 499.0]) / interval_s).astype(int)] = True
    fault = only_fault(report_of(flight, flight.reading(flight.series.reading_pa + 90.0 * hit)), FaultKind.SPIKES)
    assert_span(fault, 100.0, 499.0, 0.2)
    assert fault.message.startswith("9 lone readings")


def test_two_bursts_of_spikes_are_told_apart() -> None:
    flight = circling(duration_s=600.0)
    hit = np.isin(np.arange(flight.time_s.size) % 50, [7]) & ((flight.time_s < 60.0) | (flight.time_s > 540.0))
    faults = report_of(flight, flight.reading(flight.series.reading_pa + 90.0 * hit)).faults
    assert [fault.fault for fault in faults] == [FaultKind.SPIKES, FaultKind.SPIKES]


def test_a_gap_in_time_is_a_dropout() -> None:
    flight = circling()
    keep = ~inside(flight)
    series = flight.series
    cut = replace(
        series,
        **{
            name: getattr(series, name)[keep]
            for name in (
                "time_s",
                "reading_pa",
                "static_pressure_pa",
                "air_temperature_k",
                "altitude_m",
                "on_ground",
                "at_rest",
            )
        },
    )
    report = report_of(flight, cut)
    assert_span(only_fault(report, FaultKind.DROPOUT), near_s=0.2)
    assert not report.probe_faulty.any()


def test_missing_numbers_are_a_dropout_and_marked() -> None:
    flight = circling()
    report = report_of(flight, flight.reading(np.where(inside(flight), np.nan, flight.series.reading_pa)))
    assert_span(only_fault(report, FaultKind.DROPOUT), near_s=0.2)
    np.testing.assert_array_equal(report.probe_faulty, inside(flight))


def test_a_single_missing_number_is_marked_but_no_dropout() -> None:
    flight = circling()
    reading = flight.series.reading_pa.copy()
    reading[1000] = np.nan
    report = report_of(flight, flight.reading(reading))
    assert report.faults == ()
    assert np.flatnonzero(report.probe_faulty).tolist() == [1000]


def test_a_gap_told_by_the_recorder_counts_only_where_the_probe_lost_samples() -> None:
    flight = circling()
    assert report_of(flight, log_gaps=(ReadingGap(START_S, END_S),)).faults == ()
    lost = flight.reading(np.where(inside(flight), np.nan, flight.series.reading_pa))
    report = report_of(flight, lost, log_gaps=(ReadingGap(START_S, END_S),))
    assert_span(only_fault(report, FaultKind.DROPOUT), near_s=0.2)


# --- other sensors ---------------------------------------------------------------------------------------------------


def test_a_dead_second_sensor_is_told_and_spoils_nothing() -> None:
    live = SensorNote("probe", 0, 3000, True, False, "lively", 0.0, 300.0)
    dead = SensorNote("probe", 1, 3000, False, True, "constant reading", 0.0, 300.0)
    report = report_of(circling(), sensors=(live, dead))
    fault = only_fault(report, FaultKind.DEAD)
    assert (fault.sensor, fault.start_s, fault.end_s) == ("probe", 0.0, 300.0)
    assert "instance number 1" in fault.message
    assert "constant reading" in fault.message
    assert not report.probe_faulty.any()


def test_frozen_static_is_judged_on_its_own_samples() -> None:
    flight = circling()
    within = inside(flight)
    pressure = flight.static.static_pressure_pa
    stuck = np.where(within, pressure[np.flatnonzero(within)[0]], pressure)
    report = report_of(flight, static=replace(flight.static, static_pressure_pa=stuck))
    fault = only_fault(report, FaultKind.FROZEN_STATIC)
    assert fault.sensor == "static"
    assert_span(fault, near_s=0.2)
    np.testing.assert_array_equal(report.static_faulty, (flight.time_s >= START_S) & (flight.time_s <= END_S + 1e-9))
    assert not report.probe_faulty.any()


def climbing(flight: Circling, step_pa: float) -> tuple[AirDataSeries, StaticSamples]:
    """The flight on a climb of 0.5 m/s, its static pressure rounded to a step."""
    climbed_m = 0.5 * flight.series.gps_time_s
    series = replace(flight.series, gps_altitude_m=flight.series.gps_altitude_m + climbed_m)
    pressure = SEA_LEVEL_PA - PASCAL_PER_METRE * (100.0 + 0.5 * flight.time_s)
    return series, StaticSamples(flight.time_s, np.round(pressure / step_pa) * step_pa, "static")


def test_a_static_sensor_that_never_moves_is_frozen_if_the_aircraft_climbed() -> None:
    flight = circling()
    series, static = climbing(flight, 1.0)
    constant = replace(static, static_pressure_pa=np.full(static.time_s.size, 99000.0))
    report = report_of(flight, series, static=constant)
    only_fault(report, FaultKind.FROZEN_STATIC)
    assert report.static_faulty.all()


@pytest.mark.parametrize("step_pa", [1.0, 10.0, 100.0])
def test_a_rounded_static_pressure_is_not_frozen(step_pa: float) -> None:
    flight = circling()
    series, static = climbing(flight, step_pa)
    assert report_of(flight, series, static=static).faults == ()


def climb_out(flight: Circling, port_follows: bool, shared: bool) -> FaultReport:
    """A climb of 60 m within the span, with a static port that follows or not, that the probe shares or not."""
    climbed = 60.0 * np.clip((flight.time_s - START_S) / (END_S - START_S), 0.0, 1.0)
    by_gps = np.interp(flight.series.gps_time_s, flight.time_s, climbed)
    drop = PASCAL_PER_METRE * climbed
    series = replace(
        flight.reading(flight.series.reading_pa - (drop if shared else 0.0)),
        gps_altitude_m=flight.series.gps_altitude_m + by_gps,
        altitude_m=flight.series.altitude_m + climbed,
    )
    pressure = flight.static.static_pressure_pa - (drop if port_follows else 0.0)
    return report_of(flight, series, static=replace(flight.static, static_pressure_pa=pressure))


def test_a_static_port_that_follows_the_climb_is_sound() -> None:
    assert climb_out(circling(), port_follows=True, shared=False).faults == ()


def test_a_blocked_static_port_is_frozen_though_its_noise_goes_on() -> None:
    report = climb_out(circling(), port_follows=False, shared=False)
    fault = only_fault(report, FaultKind.FROZEN_STATIC)
    assert_span(fault, near_s=30.0)
    assert "port" in fault.message
    assert report.static_faulty[inside(circling())].all()
    assert not report.probe_faulty.any()


def test_a_blocked_port_that_the_probe_shares_spoils_the_reading() -> None:
    report = climb_out(circling(), port_follows=False, shared=True)
    assert FaultKind.FROZEN_STATIC in {fault.fault for fault in report.faults}
    assert report.probe_faulty[inside(circling())].all()


# --- the report ------------------------------------------------------------------------------------------------------


def test_faults_come_in_order_of_time_each_with_a_message() -> None:
    flight = circling(duration_s=400.0)
    reading = flight.series.reading_pa.copy()
    reading[(flight.time_s > 300.0) & (flight.time_s < 340.0)] = 123.4
    reading[(flight.time_s > 100.0) & (flight.time_s < 120.0)] = np.nan
    reading[500] += 200.0
    faults = report_of(flight, flight.reading(reading)).faults
    assert [fault.fault for fault in faults] == [FaultKind.SPIKES, FaultKind.DROPOUT, FaultKind.FROZEN]
    assert all(f"{fault.start_s:.1f} s" in fault.message for fault in faults)


@pytest.mark.parametrize("count", [0, 1, 2, 5, 10, 11, 25, 100])
def test_next_to_no_samples_raise_nothing(count: int) -> None:
    flight = circling()
    series = flight.series
    few = {
        name: getattr(series, name)[:count]
        for name in (
            "time_s",
            "reading_pa",
            "static_pressure_pa",
            "air_temperature_k",
            "altitude_m",
            "on_ground",
            "at_rest",
        )
    }
    report = report_of(flight, replace(series, **few))
    assert report.probe_faulty.size == count


def test_without_gps_nothing_is_raised() -> None:
    flight = circling()
    empty = np.empty(0)
    series = replace(
        flight.series,
        gps_time_s=empty,
        velocity_north_mps=empty,
        velocity_east_mps=empty,
        velocity_down_mps=empty,
        gps_altitude_m=empty,
        gps_on_ground=np.empty(0, dtype=bool),
    )
    assert report_of(flight, series, static=None).faults == ()


def test_readings_that_are_all_missing_raise_nothing() -> None:
    flight = circling()
    report = report_of(flight, flight.reading(np.full(flight.time_s.size, np.nan)))
    assert report.probe_faulty.all()

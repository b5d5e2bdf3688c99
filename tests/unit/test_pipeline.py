"""The whole reduction of a decoded log: recovered truth, what is said where something is missing, and every refusal."""

from dataclasses import replace

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from service.domain.codes import Direction, FaultKind, Flag, Reason, Verdict, ZeroOffsetSource
from service.domain.log import AttitudeSamples, DecodedLog, GpsSamples, ProbeSamples
from service.domain.results import Estimate, Reduction
from service.domain.settings import Aircraft, Configuration, ProbeSettings, Settings, Window
from service.pipeline import reduce_flight
from tests.unit.flown_circles import Flown, air_speed_and_heading, log_of

PLAIN = Settings()
ZERO_GIVEN = Settings(probe=ProbeSettings(zero_offset_pa=0.0, zero_offset_uncertainty_pa=0.05))


def reduced(flown: Flown, settings: Settings = PLAIN) -> Reduction:
    return reduce_flight(log_of(flown), settings)


def codes(answer: Reduction) -> set[Reason]:
    return {reason.code for reason in answer.calibration.reasons}


def scale_of(answer: Reduction) -> Estimate:
    """Pressure scale of an answer that is not refused."""
    assert answer.calibration.verdict is not Verdict.REFUSED, answer.calibration.reasons
    assert answer.calibration.pressure_scale is not None
    return answer.calibration.pressure_scale


def assert_recovered(answer: Reduction, flown: Flown, deviations: float = 3.0) -> None:
    """Scale and wind of an answer lie within so many of their standard uncertainties of the truth."""
    scale, wind = scale_of(answer), answer.wind
    assert wind is not None
    assert abs(scale.value - flown.pressure_scale) < deviations * scale.standard_uncertainty
    for estimate, truth in ((wind.north_mps, flown.wind_north_mps), (wind.east_mps, flown.wind_east_mps)):
        assert abs(estimate.value - truth) < deviations * estimate.standard_uncertainty
        assert estimate.standard_uncertainty < 0.1


def with_gps(log: DecodedLog, **changes: FloatArray | None) -> DecodedLog:
    assert log.gps is not None
    return replace(log, gps=replace(log.gps, **changes))  # type: ignore[arg-type]


def gps_of(log: DecodedLog) -> GpsSamples:
    assert log.gps is not None
    return log.gps


def with_reading(log: DecodedLog, reading_pa: FloatArray) -> DecodedLog:
    assert log.probe is not None
    return replace(log, probe=replace(log.probe, impact_pressure_pa=reading_pa))


def reading_of(log: DecodedLog) -> FloatArray:
    assert log.probe is not None
    return log.probe.impact_pressure_pa


# --- recovered truth --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("pressure_scale", [0.05, 0.25, 1.0 / 3.0, 1.0, 2.0, 4.9])
def test_any_pressure_scale_is_found(pressure_scale: float) -> None:
    # a venturi of area ratio 2 reads 3 or 4 times the impact pressure
    flown = Flown(pressure_scale=pressure_scale)
    answer = reduced(flown, ZERO_GIVEN)
    assert answer.calibration.verdict is Verdict.ACCEPTED
    assert scale_of(answer).value == pytest.approx(pressure_scale, rel=3e-3)
    assert_recovered(answer, flown)


@pytest.mark.parametrize("pressure_scale", [0.03, 8.0])
def test_a_pressure_scale_beyond_the_limits_is_refused(pressure_scale: float) -> None:
    answer = reduced(Flown(pressure_scale=pressure_scale, noise_pa=0.1), ZERO_GIVEN)
    assert answer.calibration.verdict is Verdict.REFUSED
    assert codes(answer) <= {Reason.SCALE_OUT_OF_RANGE, Reason.PROBE_FAULT}


def test_the_corrected_airspeeds_are_those_flown() -> None:
    flown = Flown(pressure_scale=0.8, temperature_off_k=12.0)
    answer = reduced(flown, ZERO_GIVEN)
    series = answer.airspeed
    assert series is not None
    truth, _ = air_speed_and_heading(flown, series.time_s)
    inside = slice(30, -30)
    off = (series.true_mps - truth)[inside]
    assert abs(np.mean(off)) < 0.03
    assert np.mean(np.abs(off) < 1.96 * series.true_standard_uncertainty_mps[inside]) > 0.9
    # density is 0.978 of the standard at sea level less 12 K of warmth: true airspeed stands well above calibrated
    assert np.all(series.true_mps[inside] > series.calibrated_mps[inside] + 0.3)


@pytest.mark.parametrize("toward_deg", [20.0, 200.0])
@pytest.mark.parametrize("wind_mps", [0.0, 17.0, 25.0])
def test_wind_up_to_beyond_the_airspeed_hides_no_loiter(toward_deg: float, wind_mps: float) -> None:
    north, east = wind_mps * np.cos(np.radians(toward_deg)), wind_mps * np.sin(np.radians(toward_deg))
    flown = Flown(wind_north_mps=float(north), wind_east_mps=float(east))
    answer = reduced(flown)
    assert_recovered(answer, flown)
    (loiter,) = answer.loiters
    assert loiter.direction is Direction.RIGHT
    assert loiter.turns == pytest.approx(6.0, abs=0.3)
    assert loiter.heading_coverage_deg > 350.0


def test_no_direction_is_told_of_a_calm() -> None:
    answer = reduced(Flown(wind_north_mps=0.0, wind_east_mps=0.0))
    assert answer.wind is not None
    assert answer.wind.from_deg is None


def test_left_turns_are_told_from_right_ones() -> None:
    log = log_of(Flown(wind_north_mps=0.0))
    mirrored = with_gps(log, velocity_north_mps=-gps_of(log).velocity_north_mps)
    (loiter,) = reduce_flight(mirrored, PLAIN).loiters
    assert loiter.direction is Direction.LEFT


def test_given_windows_are_the_loiters() -> None:
    flown = Flown(turns=8)
    settings = Settings(loiters=(Window(10.0, 95.0), Window(120.0, 210.0)))
    answer = reduced(flown, settings)
    assert [(loiter.start_s, loiter.end_s) for loiter in answer.loiters] == [(10.0, 95.0), (120.0, 210.0)]
    assert [wind.loiter for wind in answer.wind_by_loiter] == [0, 1]
    assert_recovered(answer, flown)


def test_given_windows_without_flight_hold_nothing() -> None:
    answer = reduced(Flown(), Settings(loiters=(Window(5000.0, 5100.0),)))
    assert answer.calibration.verdict is Verdict.REFUSED
    assert Reason.TOO_FEW_SAMPLES in codes(answer)


@pytest.mark.parametrize("headings", [(10.0, 130.0, 250.0), (0.0, 90.0, 180.0, 270.0), (0.0, 240.0, 120.0)])
def test_legs_on_three_or_more_headings_serve_as_well(headings: tuple[float, ...]) -> None:
    flown = Flown(headings_deg=headings, turn_s=45.0)
    answer = reduced(flown)
    assert_recovered(answer, flown, deviations=4.0)
    assert {loiter.direction for loiter in answer.loiters} == {Direction.STRAIGHT}
    assert Reason.FEW_CIRCLES in codes(answer)


@pytest.mark.parametrize(("turns", "answered"), [(1.0, True), (0.8, True), (0.5, False), (0.25, False)])
def test_a_part_of_one_turn(turns: float, answered: bool) -> None:
    flown = Flown(turns=turns, turn_s=90.0)
    answer = reduced(flown)
    if answered:
        assert_recovered(answer, flown, deviations=4.0)
    else:
        assert answer.calibration.verdict is Verdict.REFUSED
        assert codes(answer) == {Reason.HEADING_COVERAGE}


def test_a_shorter_arc_is_less_sure() -> None:
    whole, part = (scale_of(reduced(Flown(turns=turns, turn_s=90.0))) for turns in (1.0, 0.75))
    assert part.standard_uncertainty > whole.standard_uncertainty


# --- zero offset ------------------------------------------------------------------------------------------------------


def test_a_large_zero_is_read_at_rest() -> None:
    flown = Flown(zero_offset_pa=115.0, rest_s=20.0, wind_north_mps=0.5, wind_east_mps=-0.5)
    answer = reduced(flown)
    calibration = answer.calibration
    assert calibration.zero_offset_source is ZeroOffsetSource.GROUND
    assert calibration.zero_offset_pa is not None
    assert calibration.zero_offset_pa.value == pytest.approx(115.0, abs=0.3)
    assert_recovered(answer, flown)


def test_the_rest_is_no_part_of_the_loiters() -> None:
    flown = Flown(rest_s=20.0)
    answer = reduced(flown)
    assert all(loiter.start_s >= 18.0 and loiter.end_s <= flown.duration_s - 18.0 for loiter in answer.loiters)
    assert answer.airspeed is not None
    on_ground = (answer.airspeed.flags & Flag.ON_GROUND) > 0
    assert on_ground[answer.airspeed.time_s < 19.0].all()
    assert not on_ground[(answer.airspeed.time_s > 30.0) & (answer.airspeed.time_s < 190.0)].any()


def test_a_given_zero_comes_before_the_rest() -> None:
    flown = Flown(zero_offset_pa=20.0, rest_s=20.0)
    settings = Settings(probe=ProbeSettings(zero_offset_pa=20.0, zero_offset_uncertainty_pa=0.1))
    answer = reduced(flown, settings)
    assert answer.calibration.zero_offset_source is ZeroOffsetSource.GIVEN
    assert answer.calibration.zero_offset_pa is not None
    assert answer.calibration.zero_offset_pa.value == pytest.approx(20.0, abs=0.05)
    assert_recovered(answer, flown)


def test_the_uncertainty_of_a_given_zero_widens_the_interval() -> None:
    def deviation(uncertainty_pa: float) -> float:
        settings = Settings(probe=ProbeSettings(zero_offset_pa=0.0, zero_offset_uncertainty_pa=uncertainty_pa))
        return scale_of(reduced(Flown(), settings)).standard_uncertainty

    # 5 Pa of some 158 Pa read is 3.2 % of the pressure scale
    assert deviation(0.05) < 0.003
    assert deviation(5.0) == pytest.approx(1.1 * 5.0 / 158.0, rel=0.15)


def test_a_raw_zero_is_fitted_from_two_airspeeds() -> None:
    flown = Flown(turns=12, zero_offset_pa=90.0, airspeed_mps=14.5, second_airspeed_mps=22.0)
    log = log_of(flown)
    assert log.probe is not None
    answer = reduce_flight(replace(log, probe=replace(log.probe, compensated=False)), PLAIN)
    calibration = answer.calibration
    assert calibration.zero_offset_source is ZeroOffsetSource.FITTED
    assert calibration.zero_offset_pa is not None
    assert calibration.zero_offset_pa.value == pytest.approx(90.0, abs=1.0)
    assert Reason.ZERO_OFFSET_ASSUMED not in codes(answer)
    assert_recovered(answer, flown)


def test_a_raw_zero_at_one_airspeed_leaves_no_confident_number() -> None:
    flown = Flown(zero_offset_pa=90.0, wander_mps=0.1)
    log = log_of(flown)
    assert log.probe is not None
    answer = reduce_flight(replace(log, probe=replace(log.probe, compensated=False)), PLAIN)
    assert answer.calibration.verdict is not Verdict.ACCEPTED
    if answer.calibration.pressure_scale is not None:
        low, high = answer.calibration.pressure_scale.interval_95
        assert low < flown.pressure_scale < high


def test_without_rest_the_zero_is_assumed_and_said() -> None:
    answer = reduced(Flown())
    assert answer.calibration.zero_offset_source is ZeroOffsetSource.PRIOR
    assert Reason.ZERO_OFFSET_ASSUMED in codes(answer)


# --- what the recorder had applied, delay -----------------------------------------------------------------------------


def test_the_applied_scale_multiplies_into_the_total() -> None:
    settings = Settings(
        probe=ProbeSettings(zero_offset_pa=0.0, zero_offset_uncertainty_pa=0.05, applied_speed_scale=1.05)
    )
    calibration = reduced(Flown(), settings).calibration
    assert calibration.speed_scale is not None
    assert calibration.total_speed_scale is not None
    assert calibration.speed_scale.value == pytest.approx(np.sqrt(1.1), rel=2e-3)
    assert calibration.total_speed_scale.value == pytest.approx(1.05 * calibration.speed_scale.value, rel=1e-12)
    assert calibration.total_speed_scale.interval_95 == pytest.approx(
        [1.05 * end for end in calibration.speed_scale.interval_95], rel=1e-12
    )


@pytest.mark.parametrize("gps_delay_s", [0.1, 0.4])
def test_the_heading_tells_the_gps_delay(gps_delay_s: float) -> None:
    flown = Flown(gps_delay_s=gps_delay_s, turns=4)
    right = log_of(flown)
    assert right.probe is not None
    time_s = right.probe.time_s
    _, heading = air_speed_and_heading(flown, time_s)
    # turns both ways: the second half mirrored about east
    north = gps_of(right).velocity_north_mps
    mirror = np.where(gps_of(right).time_s - gps_delay_s < 60.0, 1.0, -1.0)
    yaw = np.degrees(np.where(time_s < 60.0, heading, np.pi - heading))
    flat = np.zeros(time_s.size)
    log = with_gps(right, velocity_north_mps=(north - 3.0) * mirror + 3.0)
    answer = reduce_flight(replace(log, attitude=AttitudeSamples(time_s, flat + 30.0, flat, yaw)), ZERO_GIVEN)
    delay = answer.calibration.gps_delay_s
    assert delay is not None
    assert delay.value == pytest.approx(gps_delay_s, abs=0.08)
    assert abs(delay.value - gps_delay_s) < 3.0 * delay.standard_uncertainty
    assert delay.standard_uncertainty < 0.1
    assert [loiter.direction for loiter in answer.loiters] == [Direction.RIGHT, Direction.LEFT]


# --- unclean data -----------------------------------------------------------------------------------------------------


def test_spikes_on_the_gps_move_nothing() -> None:
    flown = Flown()
    log = log_of(flown)
    north, east = gps_of(log).velocity_north_mps.copy(), gps_of(log).velocity_east_mps.copy()
    north[::37] += 40.0
    east[5::61] -= 25.0
    answer = reduce_flight(with_gps(log, velocity_north_mps=north, velocity_east_mps=east), ZERO_GIVEN)
    assert_recovered(answer, flown, deviations=4.0)
    assert scale_of(answer).value == pytest.approx(1.1, rel=3e-3)


def test_spikes_on_the_probe_leave_the_fit_and_are_told() -> None:
    flown = Flown()
    log = log_of(flown)
    reading = reading_of(log).copy()
    spikes = np.arange(100, reading.size - 100, 97)
    reading[spikes] += 900.0
    answer = reduce_flight(with_reading(log, reading), ZERO_GIVEN)
    assert scale_of(answer).value == pytest.approx(1.1, rel=3e-3)
    assert FaultKind.SPIKES in {fault.fault for fault in answer.faults}
    assert answer.airspeed is not None
    assert np.mean((answer.airspeed.flags[spikes] & Flag.FAULTY) > 0) > 0.9


def test_gaps_of_nan_are_left_out() -> None:
    flown = Flown(turns=8)
    log = log_of(flown)
    north, reading = gps_of(log).velocity_north_mps.copy(), reading_of(log).copy()
    north[200:300] = np.nan
    north[::11] = np.nan
    reading[1300:1500] = np.nan
    reading[::53] = np.nan
    answer = reduce_flight(with_reading(with_gps(log, velocity_north_mps=north), reading), ZERO_GIVEN)
    assert_recovered(answer, flown, deviations=4.0)
    assert answer.airspeed is not None
    missing = np.isnan(reading)
    assert np.isnan(answer.airspeed.true_mps[missing]).all()
    assert ((answer.airspeed.flags[missing] & Flag.MISSING) > 0).all()
    assert np.isfinite(answer.airspeed.true_mps[~missing]).all()


def test_speed_and_track_alone_suffice() -> None:
    flown = Flown()
    log = with_gps(log_of(flown), velocity_down_mps=None)
    assert_recovered(reduce_flight(log, ZERO_GIVEN), flown)


def test_without_any_altitude_the_air_is_that_of_sea_level_and_the_interval_wide() -> None:
    log = with_gps(log_of(Flown(), static=None, temperature=None), velocity_down_mps=None, altitude_m=None)
    answer = reduce_flight(log, ZERO_GIVEN)
    assert answer.calibration.verdict is Verdict.DOUBTFUL
    assert {Reason.STANDARD_STATIC, Reason.STANDARD_TEMPERATURE, Reason.INTERVAL_WIDE} <= codes(answer)
    assert scale_of(answer).standard_uncertainty > 0.05


def test_a_missing_temperature_is_said_and_paid_for() -> None:
    with_it, without = reduced(Flown(), ZERO_GIVEN), reduce_flight(log_of(Flown(), temperature=None), ZERO_GIVEN)
    assert Reason.STANDARD_TEMPERATURE in codes(without)
    assert Reason.STANDARD_TEMPERATURE not in codes(with_it)
    # 10 K of 287 K are 3.5 % of the density
    assert scale_of(without).standard_uncertainty == pytest.approx(1.1 * 0.035, rel=0.1)
    assert without.airspeed is not None
    assert ((without.airspeed.flags & Flag.STANDARD_TEMPERATURE) > 0).all()


def test_a_missing_static_pressure_is_said() -> None:
    answer = reduce_flight(log_of(Flown(), static=None), ZERO_GIVEN)
    assert Reason.STANDARD_STATIC in codes(answer)
    assert answer.airspeed is not None
    assert ((answer.airspeed.flags & Flag.STANDARD_STATIC) > 0).all()
    # the standard atmosphere at the GPS altitude is that of the flight
    assert scale_of(answer).value == pytest.approx(1.1, rel=3e-3)


def test_what_the_reader_noticed_is_passed_on() -> None:
    answer = reduce_flight(log_of(Flown(), time_steps_back=3, truncated=True), PLAIN)
    assert {Reason.TIME_STEPS_BACK, Reason.TRUNCATED} <= codes(answer)
    assert answer.calibration.verdict is Verdict.ACCEPTED
    assert answer.inputs.truncated


def test_two_hours_of_circles_are_reduced() -> None:
    flown = Flown(turns=240, probe_hz=5.0)
    answer = reduced(flown)
    assert_recovered(answer, flown, deviations=4.0)
    assert answer.airspeed is not None
    assert answer.airspeed.time_s.size == 36000
    assert sum(loiter.turns for loiter in answer.loiters) == pytest.approx(240.0, abs=1.0)


# --- refusals ---------------------------------------------------------------------------------------------------------


def assert_refused(answer: Reduction, *expected: Reason) -> None:
    calibration = answer.calibration
    assert calibration.verdict is Verdict.REFUSED
    assert codes(answer) == set(expected)
    assert all(reason.message for reason in calibration.reasons)
    assert calibration.speed_scale is None
    assert calibration.pressure_scale is None
    assert calibration.total_speed_scale is None
    assert answer.wind is None
    assert answer.wind_by_loiter == ()


def test_straight_flight_is_refused() -> None:
    assert_refused(reduced(Flown(headings_deg=(40.0,), turn_s=300.0)), Reason.HEADING_COVERAGE)


def test_two_headings_are_refused() -> None:
    assert_refused(reduced(Flown(headings_deg=(40.0, 220.0) * 2, turn_s=60.0)), Reason.HEADING_COVERAGE)


def test_no_probe() -> None:
    answer = reduce_flight(log_of(Flown(), probe=None), PLAIN)
    assert_refused(answer, Reason.NO_PROBE)
    assert answer.airspeed is None
    assert answer.inputs.samples["probe"] == 0
    assert answer.inputs.samples["gps"] == 900


def test_no_gps() -> None:
    answer = reduce_flight(log_of(Flown(), gps=None), PLAIN)
    assert_refused(answer, Reason.NO_GPS)
    assert answer.airspeed is not None
    # what was read is still told, and that it is uncalibrated
    assert np.isfinite(answer.airspeed.indicated_mps).all()
    assert ((answer.airspeed.flags & Flag.UNCALIBRATED) > 0).all()


def test_no_fix() -> None:
    log = log_of(Flown())
    nowhere = np.full(gps_of(log).time_s.size, np.nan)
    answer = reduce_flight(with_gps(log, velocity_north_mps=nowhere, velocity_east_mps=nowhere), PLAIN)
    assert_refused(answer, Reason.NO_FIX)


def test_ground_only() -> None:
    log = log_of(Flown(turns=4))
    nought = np.zeros(gps_of(log).time_s.size)
    rng = np.random.default_rng(3)
    still = with_gps(log, velocity_north_mps=nought, velocity_east_mps=nought)
    answer = reduce_flight(with_reading(still, rng.normal(0.0, 0.5, reading_of(log).size)), PLAIN)
    assert_refused(answer, Reason.NOT_AIRBORNE)


def test_probe_and_gps_at_different_times() -> None:
    log = log_of(Flown())
    answer = reduce_flight(with_gps(log, time_s=gps_of(log).time_s + 9000.0), PLAIN)
    assert_refused(answer, Reason.NO_OVERLAP)


def test_a_probe_without_a_single_value() -> None:
    log = log_of(Flown())
    answer = reduce_flight(with_reading(log, np.full(reading_of(log).size, np.nan)), PLAIN)
    assert answer.calibration.verdict is Verdict.REFUSED
    assert codes(answer) <= {Reason.TOO_FEW_SAMPLES, Reason.PROBE_FAULT}


@pytest.mark.parametrize(
    "reading",
    [
        pytest.param(lambda q: np.full(q.size, 140.0), id="frozen"),
        pytest.param(lambda q: np.random.default_rng(2).normal(0.0, 0.5, q.size), id="blocked"),
        pytest.param(lambda q: -q, id="swapped"),
    ],
)
def test_a_broken_probe_is_refused(reading: object) -> None:
    assert callable(reading)
    log = log_of(Flown(turns=8, wander_mps=0.5))
    answer = reduce_flight(with_reading(log, reading(reading_of(log))), PLAIN)
    assert_refused(answer, Reason.PROBE_FAULT)
    assert answer.faults
    assert answer.airspeed is not None
    assert ((answer.airspeed.flags & Flag.FAULTY) > 0).mean() > 0.9


def test_readings_of_another_flight_are_no_calibration() -> None:
    # pressures that have nothing to do with the motion: a wide scatter of speed against a steady one
    log = log_of(Flown(turns=8))
    time_s = np.arange(reading_of(log).size) / 10.0
    other = 160.0 + 140.0 * np.sin(2.0 * np.pi * time_s / 41.0) + np.random.default_rng(4).normal(0.0, 1.0, time_s.size)
    answer = reduce_flight(with_reading(log, other), PLAIN)
    assert answer.calibration.verdict is not Verdict.ACCEPTED


# --- the rest of the answer -------------------------------------------------------------------------------------------


def test_progress_rises_from_nothing_to_all() -> None:
    told: list[float] = []
    reduce_flight(log_of(Flown()), PLAIN, progress=told.append)
    assert told[0] == 0.0
    assert told[-1] == 1.0
    assert told == sorted(told)


def test_the_same_log_has_the_same_answer() -> None:
    first, second = (reduced(Flown()).calibration for _ in range(2))
    assert first == second


def test_inputs_tell_what_was_there() -> None:
    answer = reduced(Flown())
    assert answer.inputs.samples == {
        "probe": 1800,
        "static": 1800,
        "temperature": 1800,
        "gps": 900,
        "attitude": 0,
        "load_factor": 0,
    }
    assert answer.inputs.duration_s == pytest.approx(179.9)
    assert answer.inputs.temperature_source == "thermometer"


def test_margins_need_a_stall_speed() -> None:
    without = reduced(Flown())
    assert without.stall_margins is None
    assert without.stall_margins_absent
    aircraft = Aircraft(configurations=(Configuration("clean", stall_speed_mps=11.0),))
    answer = reduced(Flown(), Settings(aircraft=aircraft))
    assert answer.stall_margins is not None
    assert answer.stall_margins_absent is None
    assert np.nanmedian(answer.stall_margins.margin) < 17.0 / 11.0 - 1.0


def test_margins_of_a_refused_flight_are_unknown() -> None:
    aircraft = Aircraft(configurations=(Configuration("clean", stall_speed_mps=11.0),))
    answer = reduced(Flown(headings_deg=(40.0,), turn_s=120.0), Settings(aircraft=aircraft))
    assert answer.stall_warnings == ()
    if answer.stall_margins is not None:
        assert np.isnan(answer.stall_margins.margin).all()


def test_the_samples_need_no_common_clock_rate() -> None:
    flown = Flown(probe_hz=1.0, gps_hz=1.0, turns=8)
    assert_recovered(reduced(flown, ZERO_GIVEN), flown, deviations=4.0)


def test_a_probe_faster_than_the_gps_by_far() -> None:
    flown = Flown(probe_hz=100.0, gps_hz=2.0, turns=3)
    assert_recovered(reduced(flown, ZERO_GIVEN), flown, deviations=4.0)


@pytest.mark.parametrize("count", [0, 1, 2, 3, 9])
def test_few_samples_are_refused(count: int) -> None:
    log = log_of(Flown())
    assert log.probe is not None
    few = ProbeSamples(log.probe.time_s[:count], log.probe.impact_pressure_pa[:count], "probe")
    for cut in (replace(log, probe=few), _cut_gps(log, count), _cut_gps(replace(log, probe=few), count)):
        answer = reduce_flight(cut, PLAIN)
        assert answer.calibration.verdict is Verdict.REFUSED
        assert answer.calibration.reasons


def _cut_gps(log: DecodedLog, count: int) -> DecodedLog:
    gps = gps_of(log)
    return replace(
        log,
        gps=GpsSamples(
            gps.time_s[:count],
            gps.velocity_north_mps[:count],
            gps.velocity_east_mps[:count],
            None,
            None,
            None,
            None,
            None,
            "GPS",
        ),
    )

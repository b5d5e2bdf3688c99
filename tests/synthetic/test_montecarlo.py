"""The campaign's own reckoning: batches, coverages, limits of chance, comparisons, tables."""

import re
from collections import Counter
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from service.domain.codes import Verdict
from service.domain.results import Calibration, CorrectedSeries, Estimate, Reduction
from service.pipeline import reduce_flight
from tests.made import estimate
from tests.montecarlo.__main__ import main
from tests.montecarlo.campaign import BATCH, plan_tasks
from tests.montecarlo.limits import Coverage, Limits
from tests.montecarlo.outcome import CRASHED, Answer, Outcome, judge, outcome_of
from tests.montecarlo.recorded_flight import scatter
from tests.montecarlo.summary import COVERAGES, paired_ratio, summarise
from tests.montecarlo.table import other_row, scale_row, totals
from tests.synthetic.families import FAMILIES, simulate_mixed
from tests.synthetic.truth import SimulatedFlight

LIMITS = Limits(COVERAGES * 25)


@pytest.fixture(scope="module")
def reduced() -> tuple[SimulatedFlight, Reduction]:
    flight = simulate_mixed(["one_loiter"], 1, seed=2)["one_loiter"][0]
    return flight, reduce_flight(flight.log, flight.settings)


def _answer(outcome: Outcome) -> Answer:
    assert outcome.answer is not None
    return outcome.answer


# --- one flight -------------------------------------------------------------------------------------------------------


def _with_scale(reduction: Reduction, scale: Estimate) -> Reduction:
    calibration: Calibration = replace(reduction.calibration, speed_scale=scale)
    return replace(reduction, calibration=calibration)


@pytest.mark.parametrize(
    ("deviations", "in_95", "in_68"), [(0.0, True, True), (0.9, True, True), (-1.1, True, False), (2.1, False, False)]
)
def test_an_interval_is_judged_by_the_truth(
    reduced: tuple[SimulatedFlight, Reduction], deviations: float, in_95: bool, in_68: bool
) -> None:
    flight, reduction = reduced
    truth = flight.truth.speed_scale
    scale = _answer(judge(flight, _with_scale(reduction, estimate(truth + deviations * 0.01, 0.01)))).scale
    assert (scale.in_95, scale.in_68) == (in_95, in_68)
    assert scale.error == pytest.approx(deviations * 0.01 / truth)


def test_the_wind_is_judged_by_the_air_along_the_loiters(reduced: tuple[SimulatedFlight, Reduction]) -> None:
    flight, reduction = reduced
    assert reduction.wind is not None
    north, east = flight.truth.mean_air_velocity([(each.start_s, each.end_s) for each in reduction.loiters])
    wind = replace(reduction.wind, north_mps=estimate(north + 0.3, 0.1), east_mps=estimate(east - 0.05, 0.1))
    answer = _answer(judge(flight, replace(reduction, wind=wind)))
    assert (answer.north.error, answer.east.error) == pytest.approx((0.3, -0.05))
    assert (answer.north.in_95, answer.east.in_68) == (False, True)


def _with_airspeed(flight: SimulatedFlight, reduction: Reduction, error_mps: float, stated_mps: float) -> Reduction:
    """A corrected airspeed that is off by a constant and by the sensor's noise, and states so much."""
    series = reduction.airspeed
    assert series is not None
    truth = np.interp(series.time_s, flight.truth.probe_time_s, flight.truth.probe_true_airspeed_mps)
    noise = _noise_mps(flight, reduction) * np.random.default_rng(1).standard_normal(series.time_s.size)
    made: CorrectedSeries = replace(
        series,
        true_mps=truth + error_mps + noise,
        true_standard_uncertainty_mps=np.full(series.time_s.size, stated_mps),
    )
    return replace(reduction, airspeed=made)


def _noise_mps(flight: SimulatedFlight, reduction: Reduction) -> float:
    """dV = V / (2 q) dq of the sensor's noise; q = rho V^2 / 2."""
    assert reduction.calibration.pressure_scale is not None
    speed, density = float(flight.truth.true_airspeed_mps.mean()), 1.2
    noise_pa = reduction.calibration.pressure_scale.value * flight.truth.noise.probe_pa
    return noise_pa / (density * speed)


def test_the_sensors_noise_averages_out_of_the_mean_airspeed(reduced: tuple[SimulatedFlight, Reduction]) -> None:
    flight, reduction = reduced
    noise = _noise_mps(flight, reduction)
    check = _answer(judge(flight, _with_airspeed(flight, reduction, 0.08, noise))).airspeed
    assert check is not None
    assert check.mean_error_mps == pytest.approx(0.08, abs=0.2 * noise)
    assert check.rms_mps == pytest.approx(np.hypot(0.08, noise), rel=0.1)


def test_the_share_of_samples_within_their_uncertainty(reduced: tuple[SimulatedFlight, Reduction]) -> None:
    flight, reduction = reduced
    noise = _noise_mps(flight, reduction)
    check = _answer(judge(flight, _with_airspeed(flight, reduction, 0.0, noise))).airspeed
    assert check is not None
    assert check.share_in_95 == pytest.approx(0.95, abs=0.05)
    assert check.share_in_68 == pytest.approx(0.68, abs=0.1)


def test_a_crash_is_an_outcome(reduced: tuple[SimulatedFlight, Reduction], monkeypatch: pytest.MonkeyPatch) -> None:
    def crash(*_: object) -> Reduction:
        raise ZeroDivisionError

    monkeypatch.setattr("tests.montecarlo.outcome.reduce_flight", crash)
    outcome = outcome_of(reduced[0])
    assert outcome.verdict == CRASHED
    summary = summarise("one_loiter", [outcome])
    assert summary.missed == 1
    assert "CRASHED 1" in scale_row(summary, LIMITS)
    assert totals([summary])[-1] == "CRASHED: 1"


# --- a family ---------------------------------------------------------------------------------------------------------


def _refused(reason: str = "interval_wide") -> Outcome:
    return Outcome(str(Verdict.REFUSED), (reason,), (), 0.1, None)


def test_a_refused_good_flight_is_a_miss_in_every_coverage(reduced: tuple[SimulatedFlight, Reduction]) -> None:
    flight, reduction = reduced
    good = judge(flight, _with_scale(reduction, estimate(flight.truth.speed_scale)))
    summary = summarise("one_loiter", [good, _refused()])
    assert summary.figures is not None
    assert summary.figures.scale[0] == Coverage(95, 0.5, 2)
    assert {summary.figures.wind.north[0].of, summary.figures.airspeed.samples[1].of} == {2}
    assert summary.figures.accepted.of <= 1
    assert summary.missed == 1
    assert "MISSED 1 of 2 {'interval_wide': 1}" in scale_row(summary, LIMITS)
    assert totals([summary])[0].endswith("1 of 2")
    may_refuse = summarise("large_zero_no_ground", [good, _refused()])
    assert may_refuse.figures is not None
    assert may_refuse.figures.scale[0] == Coverage(95, 1.0, 1)
    assert may_refuse.missed == 0


def test_families_without_an_answer_show_the_share_refused(reduced: tuple[SimulatedFlight, Reduction]) -> None:
    right = summarise("half_circle", [_refused("heading_coverage")] * 3)
    assert "refused 3 of 3 (100.0 %) {'heading_coverage': 3}" in scale_row(right, LIMITS)
    assert "no answer" in other_row(right, LIMITS)
    wrong = summarise("half_circle", [_refused(), judge(*reduced)])
    assert "ANSWERED 1 of 2" in scale_row(wrong, LIMITS)
    assert totals([right, wrong]) == ["flights that hold no answer, refused: 4 of 5"]


def test_false_alarms_are_counted_by_flight_and_kind(reduced: tuple[SimulatedFlight, Reduction]) -> None:
    alarmed = replace(judge(*reduced), false_alarms=("leak", "spikes"))
    summary = summarise("one_loiter", [alarmed, judge(*reduced)])
    assert summary.alarmed == 1
    assert summary.alarms == Counter(leak=1, spikes=1)
    assert "false alarms: 1 of 2 good flights (50.00 %)" in totals([summary])


def test_the_paired_ratio_and_its_standard_error() -> None:
    rng = np.random.default_rng(3)
    theirs, mine = rng.normal(0.0, 2.0, 400), rng.normal(0.0, 1.0, 400)
    assert paired_ratio(0.8 * theirs, theirs) == pytest.approx((0.8, 0.0))
    ratio, deviation = paired_ratio(mine, theirs)
    # each root mean square of n normal errors is good to 1 / sqrt(2 n) of itself
    assert deviation == pytest.approx(0.5 / np.sqrt(400.0), rel=0.2)
    assert abs(ratio - 0.5) < 4.0 * deviation


# --- the limits of chance ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("level", [95, 68])
@pytest.mark.parametrize("flights", [12, 200, 1000])
def test_a_program_within_its_target_is_marked_in_fewer_than_one_campaign_in_twenty(level: int, flights: int) -> None:
    low, high = {95: (0.92, 0.98), 68: (0.62, 0.74)}[level]
    least, most = LIMITS.band(level, flights)
    # at the ends of the target the chance is largest; half of it at each, for all figures together
    assert stats.binom.cdf(round(least * flights) - 1, flights, low) < 0.025 / LIMITS.figures
    assert stats.binom.sf(round(most * flights), flights, high) < 0.025 / LIMITS.figures
    # and no flight further out than needed
    assert stats.binom.cdf(round(least * flights), flights, low) >= 0.025 / LIMITS.figures


def test_marks() -> None:
    assert LIMITS.mark(Coverage(95, 0.95, 1000)) == " "
    assert LIMITS.mark(Coverage(95, 0.87, 1000)) == "<"
    assert LIMITS.mark(Coverage(95, 1.0, 1000)) == ">"
    assert LIMITS.mark(Coverage(68, 0.82, 1000)) == ">"
    assert LIMITS.mark(Coverage(68, 0.55, 1000)) == "<"
    # a dozen flights say little, and none nothing
    assert LIMITS.mark(Coverage(95, 0.75, 12)) == LIMITS.mark(Coverage(95, 1.0, 12)) == " "
    assert LIMITS.mark(Coverage(95, 0.0, 0)) == " "
    assert LIMITS.mark_ratio("light", 0.95, 0.02) == "!"
    assert LIMITS.mark_ratio("calm", 0.95, 0.02) == " "
    assert LIMITS.mark_ratio("calm", 1.15, 0.02) == "!"
    assert LIMITS.mark_ratio("calm", 1.15, 0.2) == " "
    assert LIMITS.mark_bias(0.5, 1000) == "!"
    assert LIMITS.mark_bias(0.5, 40) == " "


def test_scatter_of_scales_against_their_uncertainty() -> None:
    same = [estimate(1.1, 0.05)] * 3
    assert scatter(same) == pytest.approx((0.0, 1.0))
    # mean 1.1, each of the outer two one deviation off: 2, and the chance of it is exp(-1)
    assert scatter([estimate(1.0), estimate(1.1), estimate(1.2)]) == pytest.approx((2.0, np.exp(-1.0)))
    # the surest one rules the mean
    chi_square, chance = scatter([estimate(1.0, 0.001), estimate(1.1, 0.02)])
    assert chi_square == pytest.approx(25.0, rel=0.01)
    assert chance < 1e-6


# --- the whole --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("flights", "processes"), [(1, 2), (4, 1), (4, 2), (24, 2), (40, 2), (1000, 2)])
@pytest.mark.parametrize("families", [tuple(FAMILIES), ("calm", "light", "dryden")])
def test_every_flight_is_flown_once_in_the_order_of_the_families(
    families: tuple[str, ...], flights: int, processes: int
) -> None:
    tasks = plan_tasks(families, flights, processes)
    flown = [(family, task.first + k) for task in tasks for family in task.families for k in range(task.count)]
    assert flown == [(family, index) for family in families for index in range(flights)]
    assert max(len(task.families) * task.count for task in tasks) <= BATCH
    # both processes have something to do
    assert len(tasks) >= processes


def test_the_command_prints_both_tables_and_the_worked_sets(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["one_loiter", "half_circle", "--flights", "2", "--processes", "1"]) == 0
    told = capsys.readouterr().out
    assert len(re.findall(r"^one_loiter ", told, re.MULTILINE)) == 2
    assert re.search(r"^half_circle +2 +0 +0 +2 \| refused 2 of 2", told, re.MULTILINE)
    # titles and cells stand in the same columns
    lines = [line for line in told.splitlines() if line.startswith(("family", "one_loiter"))]
    bars = [[at for at, character in enumerate(line) if character == "|"] for line in lines]
    assert bars[0] == bars[1]
    assert bars[2] == bars[3]
    # the sets' own precision, printed beside their truth
    assert told.count("accepted; pressure scale 1.1") == 2
    assert told.count(", holds the truth") == 6


def test_an_unknown_family_is_a_wrong_call(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit, match="2"):
        main(["breezy"])
    assert "no such family: breezy" in capsys.readouterr().err

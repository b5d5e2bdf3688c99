"""Small seeded campaign: flights of known truth through the whole reduction.

Bounds are such that a right program meets them with near certainty; how good it is tells `tests.montecarlo`.
"""

from collections.abc import Iterator

import numpy as np
import pytest

from service.domain.codes import FaultKind, Reason, Verdict
from service.domain.results import Estimate, Reduction
from service.pipeline import reduce_flight
from tests.synthetic.families import FAMILIES, simulate_mixed
from tests.synthetic.truth import SimulatedFlight

Reduced = dict[str, list[tuple[SimulatedFlight, Reduction]]]

UNSURE = "large_zero_no_ground"
"""A raw zero of any size at one airspeed: a wide interval, or none."""
GOOD = tuple(family for family in FAMILIES if not FAMILIES[family].refused and family != UNSURE)
REFUSED = tuple(family for family in FAMILIES if FAMILIES[family].refused)
FLIGHTS = 2
SEED = 20
MOST_DEVIATIONS = 4.5
"""Of three estimates of each of 50 flights none lies further off but by a chance of a few in a thousand."""
SCALE_RMS = {
    # some three times the errors of a large campaign
    "calm": 0.012,
    "light": 0.015,
    "moderate": 0.025,
    "still_air": 0.025,
    "two_speeds": 0.02,
    "strong_wind": 0.015,
    "slow_sensors": 0.015,
    "light_aircraft": 0.01,
}
WIND_RMS_MPS = 0.6
REASONS = {
    "straight_only": {Reason.HEADING_COVERAGE},
    "half_circle": {Reason.HEADING_COVERAGE},
    "ground_only": {Reason.NOT_AIRBORNE},
    "no_fix": {Reason.NO_FIX},
    "frozen": {Reason.PROBE_FAULT},
    "blocked": {Reason.PROBE_FAULT},
    "trapped": {Reason.PROBE_FAULT},
    "swapped": {Reason.PROBE_FAULT},
}
FAULTS = {
    "frozen": FaultKind.FROZEN,
    "blocked": FaultKind.BLOCKED,
    "trapped": FaultKind.TRAPPED,
    "swapped": FaultKind.SWAPPED,
}


@pytest.fixture(scope="module")
def reduced() -> Reduced:
    flights = simulate_mixed(FAMILIES, FLIGHTS, SEED)
    return {
        family: [(flight, reduce_flight(flight.log, flight.settings)) for flight in each]
        for family, each in flights.items()
    }


def _scale(answer: Reduction) -> Estimate:
    assert answer.calibration.speed_scale is not None
    return answer.calibration.speed_scale


def _estimates(flight: SimulatedFlight, answer: Reduction) -> Iterator[tuple[Estimate, float]]:
    """Speed scale and the components of the wind along the used loiters, each with its truth."""
    yield _scale(answer), flight.truth.speed_scale
    spans = [(loiter.start_s, loiter.end_s) for loiter in answer.loiters if loiter.used]
    north, east = flight.truth.mean_air_velocity(spans)
    assert answer.wind is not None
    yield answer.wind.north_mps, north
    yield answer.wind.east_mps, east


def _deviations(pairs: list[tuple[SimulatedFlight, Reduction]]) -> list[float]:
    return [
        (estimate.value - truth) / estimate.standard_uncertainty
        for flight, answer in pairs
        for estimate, truth in _estimates(flight, answer)
    ]


@pytest.mark.parametrize("family", GOOD)
def test_no_good_family_is_refused(reduced: Reduced, family: str) -> None:
    for _, answer in reduced[family]:
        assert answer.calibration.verdict is not Verdict.REFUSED, answer.calibration.reasons


@pytest.mark.parametrize("family", GOOD)
def test_truth_lies_within_reach_of_the_stated_uncertainty(reduced: Reduced, family: str) -> None:
    assert np.abs(_deviations(reduced[family])).max() < MOST_DEVIATIONS


@pytest.mark.parametrize("family", SCALE_RMS)
def test_error_of_scale_and_wind(reduced: Reduced, family: str) -> None:
    scale = [_scale(answer).value / flight.truth.speed_scale - 1.0 for flight, answer in reduced[family]]
    assert np.sqrt(np.mean(np.square(scale))) < SCALE_RMS[family]
    wind = [
        estimate.value - truth
        for flight, answer in reduced[family]
        for estimate, truth in list(_estimates(flight, answer))[1:]
    ]
    assert np.sqrt(np.mean(np.square(wind))) < WIND_RMS_MPS


def test_stated_uncertainty_is_neither_far_too_small_nor_far_too_large(reduced: Reduced) -> None:
    pooled = np.array([d for family in GOOD for d in _deviations(reduced[family])])
    assert pooled.size > 140
    # a normal sample of 144: root mean square within 0.85 to 1.15; correlated families and wide priors leave more room
    assert 0.6 < np.sqrt(np.mean(pooled**2)) < 1.4
    assert np.mean(np.abs(pooled) < 1.0) > 0.5
    assert np.mean(np.abs(pooled) < 1.96) > 0.85
    # not so wide that nothing ever leaves one standard uncertainty
    assert np.mean(np.abs(pooled) < 1.0) < 0.93


def test_intervals_hold_the_truth_about_as_often_as_they_say(reduced: Reduced) -> None:
    held = [
        estimate.interval_95[0] <= truth <= estimate.interval_95[1]
        for family in GOOD
        for flight, answer in reduced[family]
        for estimate, truth in _estimates(flight, answer)
    ]
    assert np.mean(held) > 0.87


@pytest.mark.parametrize("family", GOOD)
def test_the_corrected_airspeed_is_as_near_the_truth_as_it_says(reduced: Reduced, family: str) -> None:
    for flight, answer in reduced[family]:
        series = answer.airspeed
        assert series is not None
        truth = np.interp(series.time_s, flight.truth.probe_time_s, flight.truth.probe_calibrated_airspeed_mps)
        inside = np.zeros(truth.size, dtype=bool)
        for loiter in answer.loiters:
            inside |= (series.time_s >= loiter.start_s) & (series.time_s <= loiter.end_s)
        inside &= np.isfinite(series.calibrated_mps) & (series.flags == 0)
        off = (series.calibrated_mps - truth)[inside]
        # the mean error is that of scale and zero, whose uncertainty the series states; noise averages out
        stated = np.median(series.calibrated_standard_uncertainty_mps[inside]) if inside.any() else np.inf
        assert off.size == 0 or abs(np.mean(off)) < MOST_DEVIATIONS * stated


@pytest.mark.parametrize("family", REFUSED)
def test_every_refusal_family_is_refused_with_its_reason(reduced: Reduced, family: str) -> None:
    for _, answer in reduced[family]:
        calibration = answer.calibration
        assert calibration.verdict is Verdict.REFUSED
        assert {reason.code for reason in calibration.reasons} == REASONS[family]
        assert calibration.speed_scale is None
        assert answer.wind is None


def test_a_large_zero_that_nothing_tells_is_never_accepted(reduced: Reduced) -> None:
    for flight, answer in reduced[UNSURE]:
        calibration = answer.calibration
        assert calibration.verdict is not Verdict.ACCEPTED
        assert Reason.INTERVAL_WIDE in {reason.code for reason in calibration.reasons}
        if calibration.speed_scale is not None:
            low, high = calibration.speed_scale.interval_95
            assert high / low > 1.1
            assert 0.7 * low < flight.truth.speed_scale < high / 0.7


@pytest.mark.parametrize("family", FAULTS)
def test_the_fault_behind_a_refusal_is_named(reduced: Reduced, family: str) -> None:
    for _, answer in reduced[family]:
        assert FAULTS[family] in {fault.fault for fault in answer.faults}


def test_every_refused_family_has_its_reason_here() -> None:
    assert set(REASONS) == set(REFUSED)


def test_more_circles_are_surer(reduced: Reduced) -> None:
    def mean(family: str) -> float:
        return float(np.mean([_scale(answer).standard_uncertainty for _, answer in reduced[family]]))

    assert mean("light") < mean("one_loiter")
    assert mean("calm") < mean("moderate")
    assert mean("light") < mean("standard_temperature_only")

"""A quick, seeded part of the campaign over the faults: `python -m tests.synthetic.fault_campaign` is the whole."""

import pytest

from service.domain.codes import FaultKind
from service.pipeline import reduce_flight
from tests.synthetic.families import simulate_mixed
from tests.synthetic.fault_campaign import Score, faults_before_fit, with_faults
from tests.synthetic.faults import inject
from tests.synthetic.truth import SimulatedFlight

FAMILIES = ("calm", "moderate", "strong_wind", "slow_sensors", "large_zero_with_ground", "large_zero_no_ground")
BEFORE_FIT = tuple(kind for kind in FaultKind if kind is not FaultKind.LEAK)


@pytest.fixture(scope="module")
def flights() -> dict[str, list[SimulatedFlight]]:
    return simulate_mixed(FAMILIES, 2, seed=21)


@pytest.mark.parametrize("family", FAMILIES)
def test_sound_flights_raise_no_alarm_before_the_fit(flights: dict[str, list[SimulatedFlight]], family: str) -> None:
    for flight in flights[family]:
        assert faults_before_fit(flight) == ()


@pytest.mark.parametrize("kind", BEFORE_FIT)
def test_each_kind_is_found_in_every_family(flights: dict[str, list[SimulatedFlight]], kind: FaultKind) -> None:
    scores: dict[str, Score] = {}
    for flight in (flight for family in flights.values() for flight in family):
        for name, broken in with_faults(flight, (kind,), seed=21):
            scores.setdefault(name, Score()).add(flight, broken, faults_before_fit(broken))
    for name, score in scores.items():
        assert score.found >= score.flights - 1, name
        assert score.within_window >= score.flights - 1, name
        assert sum(score.others.values()) <= 1, name


def test_a_leak_is_found_after_the_fit_and_no_sound_flight_has_one(flights: dict[str, list[SimulatedFlight]]) -> None:
    sound = flights["calm"][0]
    end_s = float(sound.truth.time_s[-1])
    broken = inject(sound, FaultKind.LEAK, 0.5 * end_s, end_s, seed=21)
    (leak,) = reduce_flight(broken.log, broken.settings).faults
    assert leak.fault is FaultKind.LEAK
    assert leak.start_s == pytest.approx(0.5 * end_s, abs=30.0)
    assert reduce_flight(sound.log, sound.settings).faults == ()

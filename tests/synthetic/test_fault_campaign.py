"""A quick, seeded part of the campaign over the faults: `python -m tests.synthetic.fault_campaign` is the whole."""

import numpy as np
import pytest

from service.domain.codes import FaultKind
from service.domain.results import Fault
from tests.synthetic.families import simulate_mixed
from tests.synthetic.fault_campaign import (
    SOUND,
    SPAN_S,
    WINDOW_S,
    Outcome,
    good_families,
    judge,
    print_tables,
    span_error,
    tasks,
    with_faults,
)
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
        assert judge(flight, flight, SOUND, fit=False).others == ()


@pytest.mark.parametrize("kind", BEFORE_FIT)
def test_each_kind_is_found_in_every_family(flights: dict[str, list[SimulatedFlight]], kind: FaultKind) -> None:
    outcomes: dict[str, list[Outcome]] = {}
    for flight in (flight for family in flights.values() for flight in family):
        for row, broken in with_faults(flight, (kind,), seed=21):
            outcomes.setdefault(row, []).append(judge(flight, broken, row, fit=False))
    for row, judged in outcomes.items():
        assert sum(not outcome.off_s <= WINDOW_S for outcome in judged) <= 1, row
        assert sum(bool(outcome.others) for outcome in judged) <= 1, row


def test_a_leak_is_found_after_the_fit_and_no_sound_flight_has_one(flights: dict[str, list[SimulatedFlight]]) -> None:
    sound = flights["calm"][0]
    end_s = float(sound.truth.time_s[-1])
    leaking = judge(sound, inject(sound, FaultKind.LEAK, 0.5 * end_s, end_s, seed=21), "leak")
    assert leaking.off_s <= SPAN_S
    assert leaking.others == ()
    assert judge(sound, sound, SOUND).others == ()


@pytest.mark.parametrize("kind", [FaultKind.BLOCKED, FaultKind.TRAPPED, FaultKind.FROZEN, FaultKind.SPIKES])
def test_the_rest_of_a_flight_still_gives_the_scale(flights: dict[str, list[SimulatedFlight]], kind: FaultKind) -> None:
    sound = flights["calm"][1]
    outcome = judge(sound, inject(sound, kind, 100.0, 150.0, seed=21), str(kind))
    assert outcome.found
    assert outcome.others == ()
    # nearly five standard uncertainties; what such a span does when left in is tens
    assert abs(outcome.scale_z) < 4.75


# --- the campaign's own book-keeping ----------------------------------------------------------------------------------


def test_flights_are_dealt_evenly_and_each_sound_one_is_reduced_once() -> None:
    families = good_families()
    dealt = tasks(families, broken=100, sound=500, kinds=tuple(FaultKind), seed=3)
    looked_at = [(task.family, index) for task in dealt for index in range(task.first, task.stop)]
    assert len(looked_at) == len(set(looked_at)) == 500
    broken = sum(max(min(task.broken, task.stop) - task.first, 0) for task in dealt)
    assert broken == 100
    assert {task.family for task in dealt} == set(families)


def test_a_span_is_as_wrong_as_its_worse_end(flights: dict[str, list[SimulatedFlight]]) -> None:
    sound = flights["calm"][0]
    broken = inject(sound, FaultKind.BLOCKED, 100.0, 150.0)

    def off(kind: FaultKind, *spans_s: tuple[float, float]) -> float:
        faults = [Fault(kind, "probe", start_s, end_s, "") for start_s, end_s in spans_s]
        return span_error(sound, broken, (100.0, 150.0), faults)

    assert off(FaultKind.BLOCKED, (99.0, 154.0)) == pytest.approx(4.0)
    assert off(FaultKind.BLOCKED, (98.5, 120.0), (125.0, 150.0)) == pytest.approx(1.5)
    assert np.isnan(off(FaultKind.TRAPPED, (100.0, 150.0)))
    assert np.isnan(off(FaultKind.BLOCKED, (200.0, 250.0)))


def test_the_tables_name_a_missed_fault_and_a_false_alarm(capsys: pytest.CaptureFixture[str]) -> None:
    common = {"family": "calm", "index": 7, "refused": False, "scale_held": True, "seconds": 0.5}
    missed = Outcome("leak", span_s=(90.0, 99.0), found=False, off_s=np.nan, others=(), scale_z=0.5, **common)
    found = Outcome("leak", span_s=(90.0, 99.0), found=True, off_s=1.0, others=(), scale_z=-0.5, **common)
    alarm = Outcome(
        SOUND, span_s=(np.nan, np.nan), found=False, off_s=np.nan, others=("frozen",), scale_z=1.0, **common
    )
    print_tables([missed, found, alarm])
    lines = capsys.readouterr().out.splitlines()
    assert ["leak", "2", "50.0", "50.0", "50.0", "0", "100.0", "0.50", "1"] in [row.split() for row in lines]
    assert any("calm 7: 90.0 to 99.0 s, missed" in row for row in lines)
    assert any(row.startswith("all ") and "{'frozen': 1}" in row and "100.00" in row for row in lines)

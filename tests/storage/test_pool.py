"""Which results are pooled: each flight's newest, accepted, not left out, each log once, since the installation."""

import math
from datetime import timedelta

import pytest
from sqlalchemy import Engine

from service.storage.aircraft import AircraftStore
from service.storage.errors import NotKept
from service.storage.flights import FlightStore
from service.storage.jobs import JobQueue
from tests.storage.kept_things import FLOWN, OTHER, OWNER, add_flight, add_result, claimed, finish

KITE = "kite 7"


@pytest.fixture
def store(engine: Engine) -> FlightStore:
    return FlightStore(engine)


def pooled(store: FlightStore) -> list[str]:
    return [result.flight_id for result in store.results_of(OWNER, KITE)]


def test_results_come_in_the_order_flown_with_what_pooling_needs(store: FlightStore, engine: Engine) -> None:
    late = add_result(engine, "log 1", 0.95, aircraft=KITE, days=2)
    early = add_result(engine, "log 2", 0.93, aircraft=KITE, days=1)
    results = store.results_of(OWNER, KITE)
    assert [result.flight_id for result in results] == [early.flight_id, late.flight_id]
    assert [math.exp(result.log_speed_scale) for result in results] == pytest.approx([0.93, 0.95])
    assert [result.log_speed_scale_uncertainty for result in results] == [0.004] * 2
    assert [result.flown_utc for result in results] == [FLOWN + timedelta(days=1), FLOWN + timedelta(days=2)]
    assert [(result.number, result.method) for result in results] == [(1, "1")] * 2


def test_only_accepted_flights_of_this_aircraft_and_owner(store: FlightStore, engine: Engine) -> None:
    wanted = add_result(engine, "log 1", aircraft=KITE)
    add_result(engine, "log 2", verdict="doubtful", aircraft=KITE)
    add_result(engine, "log 3", verdict="refused", aircraft=KITE)
    add_result(engine, "log 4", aircraft="kite 8")
    add_result(engine, "log 5", aircraft=KITE, owner=OTHER)
    add_result(engine, "log 6")
    add_flight(engine, "log 7", aircraft=KITE)
    assert pooled(store) == [wanted.flight_id]


def test_an_unknown_aircraft_has_no_pool(store: FlightStore) -> None:
    for name in (KITE, "a\x00b"):
        with pytest.raises(NotKept):
            store.results_of(OWNER, name)


def test_a_flight_left_out_comes_back(store: FlightStore, engine: Engine) -> None:
    flight = add_result(engine, "a log", aircraft=KITE)
    store.exclude(OWNER, flight.flight_id, "rain")
    assert pooled(store) == []
    store.readmit(OWNER, flight.flight_id)
    assert pooled(store) == [flight.flight_id]


def test_an_installation_starts_a_new_pool(store: FlightStore, engine: Engine) -> None:
    before, on, after = (add_result(engine, f"log {day}", aircraft=KITE, days=day) for day in range(3))
    AircraftStore(engine).set_installation(OWNER, KITE, on.flown_utc)
    assert pooled(store) == [on.flight_id, after.flight_id]
    AircraftStore(engine).set_installation(OWNER, KITE, before.flown_utc)
    assert pooled(store) == [before.flight_id, on.flight_id, after.flight_id]


def test_the_newest_result_counts_and_no_older_one_in_its_place(store: FlightStore, engine: Engine) -> None:
    flight = add_result(engine, "a log", 0.94, aircraft=KITE)
    store.add_reduction(OWNER, flight.flight_id, {})
    assert finish(engine, claimed(engine), 0.97)
    assert [(result.number, math.exp(result.log_speed_scale)) for result in store.results_of(OWNER, KITE)] == [
        (2, pytest.approx(0.97))
    ]
    store.add_reduction(OWNER, flight.flight_id, {})
    assert finish(engine, claimed(engine), verdict="refused")
    assert pooled(store) == []


def test_a_result_under_way_or_failed_leaves_the_last_one_in_the_pool(store: FlightStore, engine: Engine) -> None:
    flight = add_result(engine, "a log", aircraft=KITE)
    store.add_reduction(OWNER, flight.flight_id, {})
    assert pooled(store) == [flight.flight_id]
    assert JobQueue(engine).fail(claimed(engine), "whatever")
    assert pooled(store) == [flight.flight_id]


def test_the_same_log_is_not_counted_twice(store: FlightStore, engine: Engine) -> None:
    first = add_result(engine, "a log", aircraft=KITE)
    second = add_result(engine, "a log", aircraft=KITE)
    assert pooled(store) == [first.flight_id]
    # leaving the first out means this log, not this upload
    store.exclude(OWNER, first.flight_id, "rain")
    assert pooled(store) == []
    store.delete(OWNER, first.flight_id)
    assert pooled(store) == [second.flight_id]


def test_a_duplicate_stands_in_for_a_first_without_a_result(store: FlightStore, engine: Engine) -> None:
    first = add_flight(engine, "a log", aircraft=KITE)
    assert JobQueue(engine).fail(claimed(engine), "the process was lost")
    second = add_result(engine, "a log", aircraft=KITE)
    add_result(engine, "a log", aircraft=KITE)
    assert pooled(store) == [second.flight_id]
    store.exclude(OWNER, first.flight_id, "rain")
    assert pooled(store) == []
    store.readmit(OWNER, first.flight_id)
    store.add_reduction(OWNER, first.flight_id, {})
    assert finish(engine, claimed(engine))
    assert pooled(store) == [first.flight_id]

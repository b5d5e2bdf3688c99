"""Flights are added whole or not at all, found by their owner alone, listed in pages, and go with all of theirs."""

from collections.abc import Callable
from datetime import UTC, datetime, timedelta, timezone
from itertools import chain

import pytest
from sqlalchemy import Engine, func, select

from service.domain.errors import LoiterwiseError, WrongValues
from service.domain.kept import JobState
from service.storage.aircraft import AircraftStore
from service.storage.engine import reading
from service.storage.errors import LogGone, LogMissing, NotKept
from service.storage.flights import FlightFilters, FlightStore
from service.storage.jobs import JobQueue
from service.storage.retention import Retention
from service.storage.tables import metadata
from tests.storage.kept_things import (
    FLOWN,
    OTHER,
    OWNER,
    add_flight,
    add_result,
    claimed,
    finish,
    new_flight,
    sha256_of,
)

NOBODYS = "0" * 26
ODD_NAMES = ["", "../etc", "a\x00b", "\ud800", NOBODYS.upper() + "X", "%00"]


@pytest.fixture
def store(engine: Engine) -> FlightStore:
    return FlightStore(engine)


def rows(engine: Engine) -> dict[str, int]:
    with reading(engine) as connection:
        return {
            name: connection.scalar(select(func.count()).select_from(table)) or 0
            for name, table in metadata.tables.items()
        }


def test_a_new_flight_waits_for_its_reduction(store: FlightStore) -> None:
    settings = {"aircraft": {"mass_kg": 6.4}, "note": "Käse \x00 \ud800"}
    new = new_flight(aircraft="kite 7", settings=settings, flown_utc=FLOWN)
    flight, is_new = store.add(OWNER, new)
    assert is_new
    assert len(flight.flight_id) == 26
    assert (flight.owner, flight.aircraft, flight.log_sha256) == (OWNER, "kite 7", sha256_of("a log"))
    assert (flight.log_bytes, flight.log_media_type, flight.flown_utc) == (4096, "text/csv", FLOWN)
    assert flight.done is None
    assert flight.latest.state is JobState.QUEUED
    assert (flight.latest.number, flight.latest.settings, flight.latest.attempts) == (1, settings, 0)
    assert abs(datetime.now(UTC) - flight.created_utc) < timedelta(minutes=1)
    assert store.get(OWNER, flight.flight_id) == flight


def test_times_of_any_zone_come_back_in_utc(store: FlightStore, engine: Engine) -> None:
    east = FLOWN.astimezone(timezone(timedelta(hours=5, minutes=30))) + timedelta(microseconds=123_456)
    flight = add_flight(engine, flown_utc=east)
    found = store.get(OWNER, flight.flight_id).flown_utc
    assert found == east
    assert found.tzinfo is UTC


def test_a_time_without_its_zone_is_never_kept(engine: Engine) -> None:
    with pytest.raises(Exception, match="zone"):
        add_flight(engine, flown_utc=datetime(2026, 5, 4))
    assert rows(engine)["flights"] == 0


def test_an_aircraft_not_known_yet_is_created_with_an_empty_profile(engine: Engine) -> None:
    add_flight(engine, aircraft="kite 7")
    add_flight(engine, "another log", aircraft="kite 7")
    found = AircraftStore(engine).get(OWNER, "kite 7")
    assert (found.profile, found.version) == ({}, 1)


def test_an_aircraft_of_an_unusable_name_leaves_nothing(engine: Engine) -> None:
    for name in ("", " kite", "kite/7", "a\x00b", "..", "\ud800", "k" * 101, "two\nlines"):
        with pytest.raises(WrongValues) as caught:
            add_flight(engine, aircraft=name)
        assert set(caught.value.errors) == {"/aircraft"}
    assert set(rows(engine).values()) == {0}


def test_a_log_that_a_sweep_took_meanwhile_is_asked_for_again(store: FlightStore, engine: Engine) -> None:
    asked: list[str] = []

    def absent(sha256: str) -> bool:
        asked.append(sha256)
        return False

    with pytest.raises(LogMissing):
        store.add(OWNER, new_flight(aircraft="kite 7"), log_present=absent)
    assert asked == [sha256_of("a log")]
    assert set(rows(engine).values()) == {0}
    assert store.add(OWNER, new_flight(), log_present=lambda _sha256: True)[1]


# --- owners


def calls_on(flight_id: str) -> list[Callable[[FlightStore, JobQueue, str], object]]:
    return [
        lambda store, _queue, owner: store.get(owner, flight_id),
        lambda store, _queue, owner: store.reductions(owner, flight_id),
        lambda store, _queue, owner: store.reduction(owner, flight_id, 1),
        lambda store, _queue, owner: store.newest_done(owner, flight_id),
        lambda store, _queue, owner: store.add_reduction(owner, flight_id, {}),
        lambda store, _queue, owner: store.exclude(owner, flight_id, "rain"),
        lambda store, _queue, owner: store.readmit(owner, flight_id),
        lambda _store, queue, owner: queue.cancel(owner, flight_id),
        lambda store, _queue, owner: store.delete(owner, flight_id),
    ]


def test_nothing_of_another_owner_is_found(store: FlightStore, engine: Engine) -> None:
    mine = add_result(engine, "a log", aircraft="kite 7")
    for call in calls_on(mine.flight_id):
        with pytest.raises(NotKept):
            call(store, JobQueue(engine), OTHER)
    assert store.get(OWNER, mine.flight_id) == mine
    assert store.list(OTHER).items == ()
    assert store.find_duplicate(OTHER, "kite 7", mine.log_sha256) is None
    with pytest.raises(NotKept):
        store.results_of(OTHER, "kite 7")


def test_a_name_that_no_flight_has_is_not_found_in_any_call(store: FlightStore, engine: Engine) -> None:
    for call in chain.from_iterable(calls_on(name) for name in (NOBODYS, *ODD_NAMES)):
        with pytest.raises(NotKept):
            call(store, JobQueue(engine), OWNER)


def test_a_reduction_of_no_such_number_is_not_found(store: FlightStore, engine: Engine) -> None:
    flight = add_flight(engine)
    for number in (0, 2, -1, 2**31, 2**80):
        with pytest.raises(NotKept):
            store.reduction(OWNER, flight.flight_id, number)


# --- the same log again


def test_the_same_log_of_an_aircraft_points_at_the_first(store: FlightStore, engine: Engine) -> None:
    first, second, third = (add_flight(engine, aircraft="kite 7") for _ in range(3))
    assert (first.duplicate_of, second.duplicate_of, third.duplicate_of) == (None, first.flight_id, first.flight_id)
    assert store.find_duplicate(OWNER, "kite 7", first.log_sha256) == first.flight_id


def test_another_aircraft_owner_or_log_is_no_duplicate(engine: Engine) -> None:
    add_flight(engine, aircraft="kite 7")
    others = [
        add_flight(engine, aircraft="kite 8"),
        add_flight(engine),
        add_flight(engine, aircraft="kite 7", owner=OTHER),
        add_flight(engine, "another log", aircraft="kite 7"),
    ]
    assert [flight.duplicate_of for flight in others] == [None] * 4


def test_flights_without_an_aircraft_are_compared_too(store: FlightStore, engine: Engine) -> None:
    first = add_flight(engine)
    assert add_flight(engine).duplicate_of == first.flight_id
    assert store.find_duplicate(OWNER, None, first.log_sha256) == first.flight_id
    assert store.find_duplicate(OWNER, "a\x00b", first.log_sha256) is None


def test_when_the_first_goes_its_next_takes_the_place(store: FlightStore, engine: Engine) -> None:
    first, second, third = (add_flight(engine) for _ in range(3))
    store.delete(OWNER, first.flight_id)
    assert store.get(OWNER, second.flight_id).duplicate_of is None
    assert store.get(OWNER, third.flight_id).duplicate_of == second.flight_id
    assert add_flight(engine).duplicate_of == second.flight_id


# --- lists


def test_pages_hold_every_flight_once_the_newest_first(store: FlightStore, engine: Engine) -> None:
    added = [add_flight(engine, f"log {number}").flight_id for number in range(7)]
    add_flight(engine, owner=OTHER)
    seen: list[list[str]] = []
    cursor = None
    while True:
        page = store.list(OWNER, cursor=cursor, limit=3)
        seen.append([flight.flight_id for flight in page.items])
        if page.next_cursor is None:
            break
        cursor = page.next_cursor
        # one that comes meanwhile disturbs no page
        add_flight(engine, f"log at {len(seen)}")
    assert [len(page) for page in seen] == [3, 3, 1]
    assert list(chain.from_iterable(seen)) == sorted(added, reverse=True)


def test_a_full_last_page_has_no_next(store: FlightStore, engine: Engine) -> None:
    for number in range(4):
        add_flight(engine, f"log {number}")
    first = store.list(OWNER, limit=2)
    assert first.next_cursor is not None
    assert store.list(OWNER, limit=2, cursor=first.next_cursor).next_cursor is None


@pytest.mark.parametrize(
    "cursor", ["", "x", "é", "Zmxp", "a\x00", "=" * 9, "ZmxpZ2h0czo", "ZmxpZ2h0czphYmM", "A" * 5000]
)
def test_a_cursor_of_somebody_s_making_is_refused(store: FlightStore, cursor: str) -> None:
    with pytest.raises(WrongValues) as caught:
        store.list(OWNER, cursor=cursor)
    assert set(caught.value.errors) == {"/cursor"}


def test_a_cursor_of_another_list_is_refused(store: FlightStore, engine: Engine) -> None:
    for name in ("kite 7", "kite 8"):
        AircraftStore(engine).put(OWNER, name, {})
    of_aircraft = AircraftStore(engine).list(OWNER, limit=1).next_cursor
    with pytest.raises(WrongValues):
        store.list(OWNER, cursor=of_aircraft)


def test_a_page_has_1_to_200_items(store: FlightStore) -> None:
    for limit in (0, -1, 201, 10**30):
        with pytest.raises(WrongValues) as caught:
            store.list(OWNER, limit=limit)
        assert set(caught.value.errors) == {"/limit"}
    assert store.list(OWNER, limit=200).items == ()


@pytest.fixture
def fleet(engine: Engine) -> dict[str, str]:
    """Names of flights in every state, by what they are."""
    add = add_result
    found = {
        "accepted": add(engine, "log 1", aircraft="kite 7", days=0),
        "doubtful": add(engine, "log 2", aircraft="kite 7", verdict="doubtful", days=1),
        "refused": add(engine, "log 3", aircraft="kite 8", verdict="refused", days=2),
        "failed": add_flight(engine, "log 4", flown_utc=FLOWN + timedelta(days=3)),
    }
    assert JobQueue(engine).fail(claimed(engine), "no log at all")
    found["cancelled"] = add_flight(engine, "log 5", flown_utc=FLOWN + timedelta(days=4))
    assert JobQueue(engine).cancel(OWNER, found["cancelled"].flight_id)
    found["running"] = add_flight(engine, "log 6", flown_utc=FLOWN + timedelta(days=5))
    claimed(engine)
    found["queued"] = add_flight(engine, "log 7", flown_utc=FLOWN + timedelta(days=6))
    return {name: flight.flight_id for name, flight in found.items()}


FILTERS = {
    "one aircraft": (FlightFilters(aircraft="kite 7"), {"accepted", "doubtful"}),
    "no such aircraft": (FlightFilters(aircraft="a\x00b"), set()),
    "verdict": (FlightFilters(verdict="refused"), {"refused"}),
    "done": (FlightFilters(state=JobState.DONE), {"accepted", "doubtful", "refused"}),
    "failed, as on the wire": (FlightFilters(state=JobState.FAILED), {"failed", "cancelled"}),
    "cancelled": (FlightFilters(state=JobState.CANCELLED), {"cancelled"}),
    "running": (FlightFilters(state=JobState.RUNNING), {"running"}),
    "queued": (FlightFilters(state=JobState.QUEUED), {"queued"}),
    "from": (FlightFilters(from_utc=FLOWN + timedelta(days=5)), {"running", "queued"}),
    "to": (FlightFilters(to_utc=FLOWN + timedelta(days=1)), {"accepted", "doubtful"}),
    "one instant": (FlightFilters(from_utc=FLOWN, to_utc=FLOWN), {"accepted"}),
    "all at once": (FlightFilters("kite 7", "doubtful", JobState.DONE, FLOWN, FLOWN + timedelta(days=9)), {"doubtful"}),
}


def test_filters_of_a_list(store: FlightStore, fleet: dict[str, str]) -> None:
    names = {flight_id: name for name, flight_id in fleet.items()}
    found = {
        what: {names[flight.flight_id] for flight in store.list(OWNER, filters).items}
        for what, (filters, _wanted) in FILTERS.items()
    }
    assert found == {what: wanted for what, (_filters, wanted) in FILTERS.items()}


def test_a_list_leaves_out_the_summaries_unless_it_is_asked(store: FlightStore, engine: Engine) -> None:
    flight = add_result(engine, "a log")
    assert flight.latest.summary == {"calibration": {"verdict": "accepted"}}
    assert store.list(OWNER, summaries=True).items == (flight,)
    shown = store.list(OWNER).items[0]
    assert shown.done is not None
    assert (shown.latest.summary, shown.done.summary, shown.done.verdict) == (None, None, "accepted")


# --- again with other settings


def test_another_reduction_stands_beside_the_first(store: FlightStore, engine: Engine) -> None:
    first = add_result(engine, "a log", scale=0.94)
    again, is_new = store.add_reduction(OWNER, first.flight_id, {"loiters": []})
    assert is_new
    assert (again.number, again.settings, again.state) == (2, {"loiters": []}, JobState.QUEUED)
    waiting = store.get(OWNER, first.flight_id)
    assert (waiting.latest, waiting.done) == (again, first.done)
    # a flight is still found by the verdict that it shows
    assert store.list(OWNER, FlightFilters(verdict="accepted"), summaries=True).items == (waiting,)

    assert finish(engine, claimed(engine), verdict="doubtful")
    flight = store.get(OWNER, first.flight_id)
    assert flight.latest.state is JobState.DONE
    assert flight.done == flight.latest == store.newest_done(OWNER, first.flight_id)
    assert store.reductions(OWNER, first.flight_id) == (first.latest, flight.latest)
    assert store.list(OWNER, FlightFilters(verdict="accepted")).items == ()


def test_a_later_reduction_that_fails_leaves_the_earlier_in_force(store: FlightStore, engine: Engine) -> None:
    first = add_result(engine, "a log")
    store.add_reduction(OWNER, first.flight_id, {})
    assert JobQueue(engine).fail(claimed(engine), "too long")
    flight = store.get(OWNER, first.flight_id)
    assert flight.latest.failure == "too long"
    assert flight.done == first.latest


def test_reductions_that_end_in_the_wrong_order(store: FlightStore, engine: Engine) -> None:
    flight = add_flight(engine)
    store.add_reduction(OWNER, flight.flight_id, {})
    first, second = claimed(engine), claimed(engine)
    assert (first.number, second.number) == (1, 2)
    assert finish(engine, second)
    assert finish(engine, first)
    newest = store.newest_done(OWNER, flight.flight_id)
    assert newest is not None
    assert newest.number == 2


def test_without_its_log_a_flight_is_not_reduced_again(store: FlightStore, engine: Engine) -> None:
    flight = add_result(engine, "a log")
    assert Retention(engine).mark_log_deleted(OWNER, flight.flight_id)
    with pytest.raises(LogGone):
        store.add_reduction(OWNER, flight.flight_id, {})
    assert len(store.reductions(OWNER, flight.flight_id)) == 1


# --- out of the pool, and away


def test_exclusion_has_a_reason_and_is_taken_back(store: FlightStore, engine: Engine) -> None:
    flight = add_flight(engine)
    out = store.exclude(OWNER, flight.flight_id, " rain in the\nprobe ")
    assert out.exclusion_reason == "rain in the\nprobe"
    assert out.excluded_utc is not None
    assert store.readmit(OWNER, flight.flight_id) == flight
    assert store.readmit(OWNER, flight.flight_id) == flight


def test_an_exclusion_without_a_usable_reason_is_refused(store: FlightStore, engine: Engine) -> None:
    flight = add_flight(engine)
    for why in ("", "  \n", "a\x00b", "\ud800", "r" * 1001):
        with pytest.raises(WrongValues) as caught:
            store.exclude(OWNER, flight.flight_id, why)
        assert set(caught.value.errors) == {"/reason"}
    assert store.get(OWNER, flight.flight_id) == flight


def test_a_deleted_flight_takes_its_results_along(store: FlightStore, engine: Engine) -> None:
    flight = add_result(engine, "a log")
    store.add_reduction(OWNER, flight.flight_id, {})
    assert finish(engine, claimed(engine))
    gone = store.delete(OWNER, flight.flight_id)
    assert (gone.log_sha256, gone.log_is_free) == (flight.log_sha256, True)
    assert gone.series_keys == (f"{flight.flight_id}-1", f"{flight.flight_id}-2")
    left = rows(engine)
    assert (left["flights"], left["reductions"]) == (0, 0)
    with pytest.raises(NotKept):
        store.get(OWNER, flight.flight_id)
    with pytest.raises(NotKept):
        store.delete(OWNER, flight.flight_id)


def test_a_log_that_another_flight_holds_is_not_free(store: FlightStore, engine: Engine) -> None:
    mine, theirs = add_flight(engine), add_flight(engine, owner=OTHER)
    assert not store.delete(OWNER, mine.flight_id).log_is_free
    assert store.delete(OTHER, theirs.flight_id).log_is_free


def test_every_error_is_one_that_http_can_map() -> None:
    assert all(issubclass(error, LoiterwiseError) for error in (LogGone, LogMissing, NotKept))

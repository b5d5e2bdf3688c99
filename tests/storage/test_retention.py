"""What is old and what is held by nobody; and no file goes while a flight is taking it."""

from concurrent.futures import ThreadPoolExecutor
from datetime import UTC, datetime, timedelta
from threading import Event

import pytest
from sqlalchemy import Engine

from service.storage.errors import LogMissing
from service.storage.flights import FlightStore
from service.storage.jobs import JobQueue
from service.storage.retention import AT_ONCE, KeptLog, Retention
from tests.storage.kept_things import OTHER, OWNER, add_flight, add_result, claimed, new_flight, sha256_of

TOMORROW = datetime.now(UTC) + timedelta(days=1)
YESTERDAY = datetime.now(UTC) - timedelta(days=1)
PATIENCE_S = 30


@pytest.fixture
def retention(engine: Engine) -> Retention:
    return Retention(engine)


def test_old_flights_are_found_with_the_oldest_first(retention: Retention, engine: Engine) -> None:
    mine = add_result(engine, "log 1")
    theirs = add_result(engine, "log 2", owner=OTHER)
    expected = (
        KeptLog(OWNER, mine.flight_id, mine.log_sha256),
        KeptLog(OTHER, theirs.flight_id, theirs.log_sha256),
    )
    for find in (retention.logs_older_than, retention.results_older_than):
        assert find(TOMORROW) == expected
        assert find(TOMORROW, limit=1) == expected[:1]
        assert find(YESTERDAY) == ()


def test_what_is_still_worked_on_stays(retention: Retention, engine: Engine) -> None:
    flight = add_flight(engine)
    for find in (retention.logs_older_than, retention.results_older_than):
        assert find(TOMORROW) == ()
    claim = claimed(engine)
    assert retention.logs_older_than(TOMORROW) == ()
    assert JobQueue(engine).fail(claim, "no log")
    assert [old.flight_id for old in retention.logs_older_than(TOMORROW)] == [flight.flight_id]


def test_a_log_that_went_is_not_found_again_but_its_results_are(retention: Retention, engine: Engine) -> None:
    flight = add_result(engine, "a log")
    assert not retention.mark_log_deleted(OTHER, flight.flight_id)
    assert retention.mark_log_deleted(OWNER, flight.flight_id)
    assert not retention.mark_log_deleted(OWNER, flight.flight_id)
    assert retention.logs_older_than(TOMORROW) == ()
    assert [old.flight_id for old in retention.results_older_than(TOMORROW)] == [flight.flight_id]
    kept = FlightStore(engine).get(OWNER, flight.flight_id)
    assert kept.log_deleted_utc is not None
    assert kept.latest == flight.latest


def test_references_of_a_log(retention: Retention, engine: Engine) -> None:
    first, second = add_flight(engine), add_flight(engine, owner=OTHER)
    sha256 = first.log_sha256
    assert retention.log_references(sha256) == 2
    retention.mark_log_deleted(OWNER, first.flight_id)
    assert retention.log_references(sha256) == 1
    FlightStore(engine).delete(OTHER, second.flight_id)
    assert retention.log_references(sha256) == 0


def test_files_that_somebody_holds(retention: Retention, engine: Engine) -> None:
    flight = add_result(engine, "a log")
    many = [sha256_of(f"log {number}") for number in range(2 * AT_ONCE)]
    assert retention.held_logs([*many, flight.log_sha256]) == {flight.log_sha256}
    assert retention.held_series([*many, f"{flight.flight_id}-1"]) == {f"{flight.flight_id}-1"}
    assert retention.held_logs([]) == frozenset()
    retention.mark_log_deleted(OWNER, flight.flight_id)
    assert retention.held_logs([flight.log_sha256]) == frozenset()
    assert retention.held_series([f"{flight.flight_id}-1"]) != frozenset()


def test_a_log_is_dropped_when_nobody_holds_it(retention: Retention, engine: Engine) -> None:
    flight = add_flight(engine)
    dropped: list[str] = []
    assert not retention.drop_log(flight.log_sha256, dropped.append)
    assert dropped == []
    FlightStore(engine).delete(OWNER, flight.flight_id)
    assert retention.drop_log(flight.log_sha256, dropped.append)
    assert dropped == [flight.log_sha256]


def test_a_flight_that_is_added_while_its_log_is_dropped_notices(retention: Retention, engine: Engine) -> None:
    files = {sha256_of("a log")}
    dropping, asked = Event(), Event()

    def drop(sha256: str) -> None:
        dropping.set()
        # time for the other to come as far as it can
        asked.wait(0.2)
        files.remove(sha256)

    def present(sha256: str) -> bool:
        asked.set()
        return sha256 in files

    with ThreadPoolExecutor(2) as threads:
        gone = threads.submit(retention.drop_log, sha256_of("a log"), drop)
        assert dropping.wait(PATIENCE_S)
        added = threads.submit(FlightStore(engine).add, OWNER, new_flight(), log_present=present)
        assert gone.result(PATIENCE_S)
        with pytest.raises(LogMissing):
            added.result(PATIENCE_S)
    assert FlightStore(engine).list(OWNER).items == ()

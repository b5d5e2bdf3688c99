"""The same key and request: the same flight, once. Also at the same time, and after a restart."""

from concurrent.futures import ThreadPoolExecutor
from datetime import UTC, datetime, timedelta

import pytest
from sqlalchemy import URL, Engine

from service.domain.errors import WrongValues
from service.domain.kept import JobState
from service.storage.engine import open_engine
from service.storage.errors import IdempotencyConflict, NotKept
from service.storage.flights import FlightStore
from service.storage.idempotency import KEPT_DAYS, Once
from service.storage.retention import Retention
from tests.storage.kept_things import OTHER, OWNER, add_flight, claimed, finish, new_flight

ONCE = Once("upload 1", "a" * 64)
ANOTHER = Once("upload 1", "b" * 64)


@pytest.fixture
def store(engine: Engine) -> FlightStore:
    return FlightStore(engine)


def test_the_same_request_gets_the_same_flight_whatever_has_become_of_it(
    store: FlightStore, engine: Engine, url: URL
) -> None:
    assert store.find_once(OWNER, ONCE) is None
    flight, is_new = store.add(OWNER, new_flight(), once=ONCE)
    assert is_new
    assert store.add(OWNER, new_flight(), once=ONCE) == (flight, False)
    claim = claimed(engine)
    running, is_new = store.add(OWNER, new_flight(), once=ONCE)
    assert (running.flight_id, running.latest.state, is_new) == (flight.flight_id, JobState.RUNNING, False)
    assert finish(engine, claim)
    after_a_restart = open_engine(url)
    done, is_new = FlightStore(after_a_restart).add(OWNER, new_flight(), once=ONCE)
    assert (done.flight_id, done.latest.state, is_new) == (flight.flight_id, JobState.DONE, False)
    after_a_restart.dispose()
    assert store.find_once(OWNER, ONCE) == (flight.flight_id, 1)
    assert len(store.list(OWNER).items) == 1


def test_another_request_with_the_key_is_refused(store: FlightStore) -> None:
    store.add(OWNER, new_flight(), once=ONCE)
    with pytest.raises(IdempotencyConflict):
        store.add(OWNER, new_flight("another log"), once=ANOTHER)
    with pytest.raises(IdempotencyConflict):
        store.find_once(OWNER, ANOTHER)
    assert len(store.list(OWNER).items) == 1


def test_owners_do_not_share_keys(store: FlightStore) -> None:
    mine, _ = store.add(OWNER, new_flight(), once=ONCE)
    theirs, is_new = store.add(OTHER, new_flight(), once=ANOTHER)
    assert is_new
    assert theirs.flight_id != mine.flight_id


def test_a_request_that_failed_has_not_used_up_its_key(store: FlightStore) -> None:
    with pytest.raises(WrongValues):
        store.add(OWNER, new_flight(aircraft="no/name"), once=ONCE)
    assert store.find_once(OWNER, ONCE) is None
    assert store.add(OWNER, new_flight(), once=ANOTHER)[1]


def test_a_key_that_cannot_be_used(store: FlightStore) -> None:
    for key in ("", "é", "a\x00b", "k" * 256):
        with pytest.raises(WrongValues) as caught:
            store.add(OWNER, new_flight(), once=Once(key, "a" * 64))
        assert set(caught.value.errors) == {"/idempotency_key"}
        with pytest.raises(WrongValues):
            store.find_once(OWNER, Once(key, "a" * 64))
    assert store.list(OWNER).items == ()


def test_a_reduction_is_added_once_too(store: FlightStore, engine: Engine) -> None:
    flight = add_flight(engine)
    again, is_new = store.add_reduction(OWNER, flight.flight_id, {"loiters": []}, once=ONCE)
    assert (again.number, is_new) == (2, True)
    assert store.add_reduction(OWNER, flight.flight_id, {"loiters": []}, once=ONCE) == (again, False)
    with pytest.raises(IdempotencyConflict):
        store.add_reduction(OWNER, flight.flight_id, {}, once=ANOTHER)
    assert len(store.reductions(OWNER, flight.flight_id)) == 2
    assert store.get(OWNER, flight.flight_id).latest == again


def test_a_deleted_flight_frees_its_key(store: FlightStore) -> None:
    flight, _ = store.add(OWNER, new_flight(), once=ONCE)
    store.delete(OWNER, flight.flight_id)
    assert store.find_once(OWNER, ONCE) is None
    again, is_new = store.add(OWNER, new_flight(), once=ONCE)
    assert is_new
    with pytest.raises(NotKept):
        store.get(OWNER, flight.flight_id)
    assert store.get(OWNER, again.flight_id) == again


def test_keys_are_forgotten_after_their_time(store: FlightStore, engine: Engine) -> None:
    store.add(OWNER, new_flight(), once=ONCE)
    now = datetime.now(UTC)
    assert Retention(engine).forget_once(now - timedelta(days=KEPT_DAYS)) == 0
    assert Retention(engine).forget_once(now + timedelta(days=KEPT_DAYS)) == 1
    assert store.find_once(OWNER, ONCE) is None


def test_eight_threads_with_one_key_make_one_flight(store: FlightStore) -> None:
    def add(_thread: int) -> tuple[str, bool]:
        flight, is_new = store.add(OWNER, new_flight(aircraft="kite 7"), once=ONCE)
        return flight.flight_id, is_new

    with ThreadPoolExecutor(8) as threads:
        answers = list(threads.map(add, range(8)))
    assert len({flight_id for flight_id, _ in answers}) == 1
    assert sum(is_new for _, is_new in answers) == 1
    assert len(store.list(OWNER).items) == 1


def test_eight_threads_with_one_log_make_one_first_flight(store: FlightStore) -> None:
    with ThreadPoolExecutor(8) as threads:
        added = list(threads.map(lambda _: store.add(OWNER, new_flight(aircraft="kite 7"))[0], range(8)))
    firsts = [flight.flight_id for flight in added if flight.duplicate_of is None]
    assert len(firsts) == 1
    assert {flight.duplicate_of for flight in added} == {None, firsts[0]}

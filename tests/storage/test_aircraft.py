"""Aircraft: versions that do not overwrite each other, installations, and which results a new profile makes stale."""

from concurrent.futures import ThreadPoolExecutor
from datetime import timedelta

import pytest
from sqlalchemy import Engine

from service.domain.errors import WrongValues
from service.storage.aircraft import AircraftStore
from service.storage.errors import NotKept, VersionConflict
from service.storage.flights import FlightStore
from service.storage.texts import aircraft_name
from tests.storage.kept_things import FLOWN, OTHER, OWNER, add_flight, add_result, claimed, finish

LIGHT = {"aircraft": {"mass_kg": 6.0}}
HEAVY = {"aircraft": {"mass_kg": 9.0}}


@pytest.fixture
def store(engine: Engine) -> AircraftStore:
    return AircraftStore(engine)


def test_a_profile_is_created_and_replaced(store: AircraftStore) -> None:
    first, created = store.put(OWNER, "kite 7", LIGHT)
    assert created
    assert (first.owner, first.name, first.profile, first.version) == (OWNER, "kite 7", LIGHT, 1)
    assert first.installation_from_utc is None
    second, created = store.put(OWNER, "kite 7", HEAVY)
    assert not created
    assert (second.profile, second.version, second.created_utc) == (HEAVY, 2, first.created_utc)
    assert store.get(OWNER, "kite 7") == second


def test_the_same_profile_again_changes_nothing(store: AircraftStore) -> None:
    first, _ = store.put(OWNER, "kite 7", LIGHT)
    assert store.put(OWNER, "kite 7", dict(LIGHT)) == (first, False)


def test_a_version_that_is_expected(store: AircraftStore) -> None:
    with pytest.raises(VersionConflict) as caught:
        store.put(OWNER, "kite 7", LIGHT, expected=1)
    assert (caught.value.expected, caught.value.found) == (1, None)
    assert store.list(OWNER).items == ()
    store.put(OWNER, "kite 7", LIGHT, expected=0)
    with pytest.raises(VersionConflict) as caught:
        store.put(OWNER, "kite 7", HEAVY, expected=0)
    assert (caught.value.expected, caught.value.found) == (0, 1)
    assert store.put(OWNER, "kite 7", HEAVY, expected=1)[0].version == 2
    with pytest.raises(VersionConflict):
        store.put(OWNER, "kite 7", LIGHT, expected=1)
    assert store.get(OWNER, "kite 7").profile == HEAVY


def test_of_eight_who_replace_one_version_one_succeeds(store: AircraftStore) -> None:
    store.put(OWNER, "kite 7", {})

    def put(turn: int) -> bool:
        try:
            store.put(OWNER, "kite 7", {"aircraft": {"mass_kg": 1.0 + turn}}, expected=1)
        except VersionConflict:
            return False
        return True

    with ThreadPoolExecutor(8) as threads:
        assert sum(threads.map(put, range(8))) == 1
    assert store.get(OWNER, "kite 7").version == 2


def test_of_eight_who_create_one_succeeds(store: AircraftStore) -> None:
    with ThreadPoolExecutor(8) as threads:
        made = list(threads.map(lambda _: store.put(OWNER, "kite 7", LIGHT), range(8)))
    assert sum(created for _, created in made) == 1
    assert {record.version for record, _ in made} == {1}


def test_owners_have_their_own_aircraft(store: AircraftStore) -> None:
    store.put(OWNER, "kite 7", LIGHT)
    with pytest.raises(NotKept):
        store.get(OTHER, "kite 7")
    with pytest.raises(NotKept):
        store.set_installation(OTHER, "kite 7", FLOWN)
    assert store.put(OTHER, "kite 7", HEAVY)[1]
    assert store.get(OWNER, "kite 7").profile == LIGHT
    assert [record.profile for record in store.list(OTHER).items] == [HEAVY]


def test_names_that_cannot_be_are_not_found_and_not_made(store: AircraftStore) -> None:
    for name in ("", "a\x00b", "\ud800", "a/b", "..", "n" * 101):
        with pytest.raises(NotKept):
            store.get(OWNER, name)
        with pytest.raises(NotKept):
            store.set_installation(OWNER, name, FLOWN)
        with pytest.raises(WrongValues):
            store.put(OWNER, name, {})
        with pytest.raises(WrongValues):
            aircraft_name(name)


def test_pages_go_by_name_in_the_order_of_its_bytes(store: AircraftStore) -> None:
    # in a dictionary's order "Zebra" would come last, and "Ärger" second
    names = ["Zebra", "alpha", "beta 10", "beta 2", "Ärger"]
    for name in reversed(names):
        store.put(OWNER, name, {})
    seen: list[str] = []
    cursor = None
    for _ in range(3):
        page = store.list(OWNER, cursor=cursor, limit=2)
        seen += [record.name for record in page.items]
        cursor = page.next_cursor
    assert seen == names
    assert cursor is None


def test_an_installation_is_a_new_version_but_no_new_profile(store: AircraftStore, engine: Engine) -> None:
    flight = add_result(engine, "a log", aircraft="kite 7")
    with pytest.raises(VersionConflict):
        store.set_installation(OWNER, "kite 7", FLOWN, expected=2)
    installed = store.set_installation(OWNER, "kite 7", FLOWN, expected=1)
    assert (installed.installation_from_utc, installed.version, installed.profile) == (FLOWN, 2, {})
    assert store.set_installation(OWNER, "kite 7", FLOWN) == installed
    assert store.set_installation(OWNER, "kite 7", FLOWN + timedelta(days=1)).version == 3
    assert not FlightStore(engine).get(OWNER, flight.flight_id).latest.stale


def test_a_new_profile_makes_results_stale_until_they_are_made_again(store: AircraftStore, engine: Engine) -> None:
    flights = FlightStore(engine)
    flight = add_result(engine, "a log", aircraft="kite 7")
    assert (flight.latest.profile_version, flight.latest.stale) == (1, False)
    store.set_installation(OWNER, "kite 7", FLOWN)
    store.put(OWNER, "kite 7", LIGHT)
    stale = flights.get(OWNER, flight.flight_id)
    assert stale.latest.stale
    assert flights.list(OWNER).items[0].latest.stale
    assert [result.stale for result in flights.results_of(OWNER, "kite 7")] == [True]

    again, _ = flights.add_reduction(OWNER, flight.flight_id, {})
    assert (again.profile_version, again.stale) == (3, False)
    claim = claimed(engine)
    assert claim.request_aircraft_profile == LIGHT
    assert finish(engine, claim)
    assert [record.stale for record in flights.reductions(OWNER, flight.flight_id)] == [True, False]
    assert [result.stale for result in flights.results_of(OWNER, "kite 7")] == [False]


def test_without_an_aircraft_nothing_gets_stale(store: AircraftStore, engine: Engine) -> None:
    flight = add_flight(engine)
    store.put(OWNER, "kite 7", LIGHT)
    store.put(OWNER, "kite 7", HEAVY)
    assert (flight.latest.profile_version, flight.latest.stale) == (None, False)
    assert not FlightStore(engine).get(OWNER, flight.flight_id).latest.stale

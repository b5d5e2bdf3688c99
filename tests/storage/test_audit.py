"""The audit trail: who did what; with what is done, or not at all."""

import pytest
from sqlalchemy import Engine

from service.domain.errors import WrongValues
from service.domain.kept import Scope
from service.storage.aircraft import AircraftStore
from service.storage.audit import AuditTrail
from service.storage.errors import LogMissing
from service.storage.flights import FlightStore
from service.storage.jobs import JobQueue
from service.storage.keys import KeyStore
from service.storage.retention import Retention
from tests.storage.kept_things import FLOWN, OTHER, OWNER, add_flight, new_flight

ME = "key of a tuner"


def told(engine: Engine, owner: str = OWNER) -> list[tuple[str | None, str, str]]:
    """The notes in the order of their making."""
    return [(note.key_id, note.action, note.object) for note in reversed(AuditTrail(engine).notes(owner))]


def test_everything_that_is_done_to_a_flight(engine: Engine) -> None:
    store = FlightStore(engine)
    flight_id = store.add(OWNER, new_flight(aircraft="kite 7"), by=ME)[0].flight_id
    store.add_reduction(OWNER, flight_id, {}, by=ME)
    JobQueue(engine).cancel(OWNER, flight_id, by=ME)
    JobQueue(engine).cancel(OWNER, flight_id, by=ME)
    store.exclude(OWNER, flight_id, "rain", by=ME)
    store.readmit(OWNER, flight_id, by=ME)
    store.readmit(OWNER, flight_id, by=ME)
    Retention(engine).mark_log_deleted(OWNER, flight_id)
    store.delete(OWNER, flight_id, by=ME)
    assert told(engine) == [
        (ME, "aircraft changed", "kite 7"),
        (ME, "flight added", flight_id),
        (ME, "reduction added", flight_id),
        (ME, "reduction cancelled", flight_id),
        (ME, "flight excluded", flight_id),
        (ME, "flight readmitted", flight_id),
        (None, "log deleted", flight_id),
        (ME, "flight deleted", flight_id),
    ]
    assert told(engine, OTHER) == []


def test_everything_that_is_done_to_aircraft_and_keys(engine: Engine) -> None:
    store = AircraftStore(engine)
    store.put(OWNER, "kite 7", {}, by=ME)
    store.put(OWNER, "kite 7", {}, by=ME)
    store.put(OWNER, "kite 7", {"aircraft": {}}, by=ME)
    store.set_installation(OWNER, "kite 7", FLOWN, by=ME)
    key, _ = KeyStore(engine).add(OWNER, "a key", [Scope.READ])
    KeyStore(engine).revoke(key.key_id, by=ME)
    KeyStore(engine).revoke(key.key_id, by=ME)
    assert told(engine) == [
        (ME, "aircraft changed", "kite 7"),
        (ME, "aircraft changed", "kite 7"),
        (ME, "installation changed", "kite 7"),
        (None, "key added", key.key_id),
        (ME, "key revoked", key.key_id),
    ]


def test_reasons_are_kept(engine: Engine) -> None:
    flight_id = add_flight(engine).flight_id
    FlightStore(engine).exclude(OWNER, flight_id, "rain", by=ME)
    assert AuditTrail(engine).notes(OWNER)[0].detail == {"reason": "rain"}


def test_what_was_undone_is_not_noted(engine: Engine) -> None:
    with pytest.raises(LogMissing):
        FlightStore(engine).add(OWNER, new_flight(aircraft="kite 7"), log_present=lambda _sha256: False)
    assert told(engine) == []


def test_notes_of_others_and_their_pages(engine: Engine) -> None:
    trail = AuditTrail(engine)
    for number in range(5):
        trail.note(OWNER, ME, "log given out", f"flight {number}")
    newest = trail.notes(OWNER, limit=2)
    assert [note.object for note in newest] == ["flight 4", "flight 3"]
    older = trail.notes(OWNER, before=newest[-1].note_id)
    assert [note.object for note in older] == ["flight 2", "flight 1", "flight 0"]
    assert older[0].at_utc <= newest[0].at_utc
    with pytest.raises(WrongValues):
        trail.notes(OWNER, limit=0)

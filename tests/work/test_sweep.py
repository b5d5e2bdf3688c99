"""What a sweep takes away, and what it leaves."""

import os
import time
from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from sqlalchemy import update

from service.domain.kept import FlightRecord, JobState
from service.storage.engine import writing
from service.storage.errors import NotKept, StorageUnavailable
from service.storage.flights import FlightStore
from service.storage.idempotency import Once
from service.storage.log_store import LogStore, log_key
from service.storage.retention import Retention
from service.storage.series_store import SeriesStore, series_key
from service.storage.tables import flights as flight_table
from service.storage.tables import idempotency as once_table
from service.work.sweep import ORPHAN_AGE_S, SPOOL_AGE_S, Swept, sweep
from tests import made
from tests.storage.conftest import SQLITE
from tests.storage.kept_things import finish, new_flight
from tests.work.workshop import OWNER, Workshop

NOTHING = Swept()


def age(path: Path | None, seconds: float) -> None:
    """Make a file older."""
    assert path is not None
    os.utime(path, (time.time() - seconds,) * 2)


def done(workshop: Workshop, log: bytes = b"a log", days: float = 0.0) -> FlightRecord:
    """A flight with its result and series, added `days` ago, its files as old."""
    flight_id = workshop.add_log(log)
    claim = workshop.claim()
    key = series_key(claim.flight_id, claim.number)
    SeriesStore(workshop.blobs).write(key, made.reduction())
    assert finish(workshop.engine, claim, series_key=key)
    with writing(workshop.engine) as connection:
        mine = update(flight_table).where(flight_table.c.flight_id == flight_id)
        connection.execute(mine.values(created_utc=datetime.now(UTC) - timedelta(days=days)))
    flight = workshop.flight(flight_id)
    for blob in (key, log_key(flight.log_sha256)):
        age(workshop.blobs.local_path(blob), 2 * ORPHAN_AGE_S)
    return flight


def has_log(workshop: Workshop, flight: FlightRecord) -> bool:
    return LogStore(workshop.blobs).size(flight.log_sha256) is not None


def has_series(workshop: Workshop, flight: FlightRecord) -> bool:
    return workshop.blobs.size(series_key(flight.flight_id, 1)) is not None


def test_what_rows_refer_to_stays(workshop: Workshop) -> None:
    flight = done(workshop, days=1000)
    assert sweep(workshop.settings) == NOTHING
    assert has_log(workshop, flight)
    assert has_series(workshop, flight)


def test_orphans_go_once_they_are_old(workshop: Workshop) -> None:
    flight = done(workshop)
    workshop.flights.delete(OWNER, flight.flight_id)
    age(workshop.blobs.local_path(log_key(flight.log_sha256)), 0.9 * ORPHAN_AGE_S)
    age(workshop.blobs.local_path(series_key(flight.flight_id, 1)), 0.9 * ORPHAN_AGE_S)
    assert sweep(workshop.settings) == NOTHING
    age(workshop.blobs.local_path(log_key(flight.log_sha256)), 1.1 * ORPHAN_AGE_S)
    age(workshop.blobs.local_path(series_key(flight.flight_id, 1)), 1.1 * ORPHAN_AGE_S)
    assert sweep(workshop.settings) == Swept(orphaned_logs=1, orphaned_series=1)
    assert not has_log(workshop, flight)
    assert not has_series(workshop, flight)


def test_a_flight_added_at_the_last_moment_keeps_its_log(workshop: Workshop, monkeypatch: pytest.MonkeyPatch) -> None:
    """Between the look at the rows and the deletion."""
    orphan = done(workshop)
    workshop.flights.delete(OWNER, orphan.flight_id)
    drop = Retention.drop_log

    def add_first(rows: Retention, sha256: str, delete: Callable[[str], object]) -> bool:
        FlightStore(workshop.engine).add(OWNER, replace(new_flight(), log_sha256=sha256))
        return drop(rows, sha256, delete)

    monkeypatch.setattr(Retention, "drop_log", add_first)
    assert sweep(workshop.settings).orphaned_logs == 0
    assert has_log(workshop, orphan)


def test_files_left_half_written_go(workshop: Workshop) -> None:
    flight = done(workshop)
    path = workshop.blobs.local_path(log_key(flight.log_sha256))
    assert path is not None
    spool = Path(workshop.settings.spool)
    spool.mkdir()
    left = {
        path.with_name(".unfinished-1-a"): (2 * ORPHAN_AGE_S, False),
        path.with_name(".unfinished-1-b"): (0.5 * ORPHAN_AGE_S, True),
        spool / "loiterwise-log-a": (2 * SPOOL_AGE_S, False),
        spool / "loiterwise-log-b": (0.5 * SPOOL_AGE_S, True),
        spool / "of somebody else": (2 * SPOOL_AGE_S, True),
    }
    for file, (seconds, _) in left.items():
        file.touch()
        age(file, seconds)
    assert sweep(workshop.settings) == Swept(unfinished_files=1, spooled_files=1)
    assert {file: file.exists() for file in left} == {file: stays for file, (_, stays) in left.items()}


def test_logs_past_their_age_go_and_results_stay(workshop: Workshop) -> None:
    old, new = done(workshop, b"old", days=31), done(workshop, b"new", days=29)
    assert sweep(replace(workshop.settings, log_days=30.0)) == Swept(expired_logs=1)
    assert (has_log(workshop, old), has_log(workshop, new)) == (False, True)
    kept = workshop.flight(old.flight_id)
    assert kept.log_deleted_utc is not None
    assert kept.latest.state is JobState.DONE
    assert has_series(workshop, old)


def test_a_log_that_a_younger_flight_holds_stays(workshop: Workshop) -> None:
    old, young = done(workshop, b"same", days=31), done(workshop, b"same", days=1)
    assert sweep(replace(workshop.settings, log_days=30.0)) == Swept(expired_logs=1)
    assert workshop.flight(old.flight_id).log_deleted_utc is not None
    assert has_log(workshop, young)


def test_flights_past_their_age_go_with_all_they_have(workshop: Workshop) -> None:
    old, new = done(workshop, b"old", days=366), done(workshop, b"new", days=364)
    assert sweep(replace(workshop.settings, log_days=30.0, result_days=365.0)) == Swept(
        expired_flights=1, expired_logs=1
    )
    with pytest.raises(NotKept):
        workshop.flight(old.flight_id)
    assert not has_log(workshop, old)
    assert not has_series(workshop, old)
    assert workshop.flight(new.flight_id).log_deleted_utc is not None
    assert has_series(workshop, new)


def test_a_job_that_waits_keeps_its_flight(workshop: Workshop) -> None:
    flight = workshop.add_log(b"a log")
    with writing(workshop.engine) as connection:
        connection.execute(update(flight_table).values(created_utc=datetime.now(UTC) - timedelta(days=1000)))
    assert sweep(replace(workshop.settings, log_days=30.0, result_days=365.0)) == NOTHING
    assert workshop.job(flight).state is JobState.QUEUED


def test_idempotency_keys_are_forgotten_after_a_week(workshop: Workshop) -> None:
    for key, days in (("old", 8), ("new", 6)):
        workshop.flights.add(OWNER, new_flight(key), once=Once(key, "0" * 64))
        with writing(workshop.engine) as connection:
            mine = update(once_table).where(once_table.c.key == key)
            connection.execute(mine.values(created_utc=datetime.now(UTC) - timedelta(days=days)))
    assert sweep(workshop.settings) == Swept(idempotency_keys=1)
    assert workshop.flights.find_once(OWNER, Once("old", "0" * 64)) is None
    assert workshop.flights.find_once(OWNER, Once("new", "0" * 64)) is not None


@pytest.mark.parametrize("database", [SQLITE])
def test_a_sweep_that_was_cut_short_is_finished_by_the_next(
    workshop: Workshop, monkeypatch: pytest.MonkeyPatch
) -> None:
    flight = done(workshop, days=366)

    def fail(*_arguments: object) -> None:
        raise StorageUnavailable("away")

    with monkeypatch.context() as patched:
        patched.setattr(LogStore, "delete", fail)
        patched.setattr(SeriesStore, "delete", fail)
        with pytest.raises(StorageUnavailable):
            sweep(replace(workshop.settings, result_days=365.0))
    assert has_log(workshop, flight)
    assert sweep(replace(workshop.settings, result_days=365.0)) == Swept(orphaned_logs=1, orphaned_series=1)


def test_what_went_is_said_in_words() -> None:
    assert str(Swept(expired_flights=2, orphaned_logs=1)) == (
        "2 expired flights, 0 expired logs, 1 orphaned logs, 0 orphaned series, 0 unfinished files, "
        "0 spooled files, 0 idempotency keys"
    )

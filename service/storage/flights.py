"""Flights that are kept, and their reductions."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, Engine, RowMapping, Select, delete, insert, select, text, update
from sqlalchemy.sql import ColumnElement

from service.domain.kept import FlightRecord, JobState, NewFlight, PooledFlight, ReductionRecord
from service.storage import idempotency, pool
from service.storage.aircraft import create_if_absent
from service.storage.audit import Action, note
from service.storage.clock import utc_now
from service.storage.engine import reading, writing
from service.storage.errors import LogGone, LogMissing, NotKept
from service.storage.flight_rows import (
    NO_FLIGHT,
    check_flight_id,
    flight_of,
    latest,
    one_flight,
    one_reduction,
    reduction_of,
    select_flights,
    select_reductions,
)
from service.storage.idempotency import Once
from service.storage.identifiers import is_flight_id, new_flight_id
from service.storage.locks import lock_log
from service.storage.pages import Page, checked_limit, page_of, read_cursor, write_cursor
from service.storage.retention import references
from service.storage.tables import NOT_DONE, aircraft, flights, reductions
from service.storage.texts import aircraft_name, is_name, reason

CURSOR = "flights"


@dataclass(frozen=True, slots=True)
class FlightFilters:
    """What a list of flights is narrowed to; None does not narrow."""

    aircraft: str | None = None
    verdict: str | None = None
    """Of the newest reduction that is done."""
    state: JobState | None = None
    """Of the latest reduction; `failed` takes in `cancelled`, as on the wire."""
    from_utc: datetime | None = None
    """`flown_utc` is this or later."""
    to_utc: datetime | None = None
    """`flown_utc` is this or earlier."""


@dataclass(frozen=True, slots=True)
class Deleted:
    """What is left to do after a flight went."""

    log_sha256: str
    log_is_free: bool
    """No flight holds that log any more: drop it by `Retention.drop_log`, which looks again."""
    series_keys: tuple[str, ...]


class FlightStore:
    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def add(
        self,
        owner: str,
        new: NewFlight,
        *,
        once: Once | None = None,
        by: str | None = None,
        log_present: Callable[[str], bool] | None = None,
    ) -> tuple[FlightRecord, bool]:
        """Keep a flight, with its first reduction queued; (the flight, whether it is new).

        All or nothing. An aircraft not known yet is created with an empty profile. With `once`, the flight that an
        earlier request of the same key made is given instead. `log_present` is asked, while nobody can drop the log,
        whether it is still in the log store.

        Raises
        ------
        WrongValues : a name or key that cannot be used.
        IdempotencyConflict : the key came with another request.
        LogMissing : `log_present` says no.
        """
        flight_id = new_flight_id()
        with writing(self._engine) as connection:
            if once and (earlier := idempotency.reserve(connection, owner, once, flight_id, 1)):
                return one_flight(connection, owner, earlier[0]), False
            if new.aircraft is not None:
                create_if_absent(connection, owner, aircraft_name(new.aircraft), by)
            lock_log(connection, new.log_sha256)
            if log_present is not None and not log_present(new.log_sha256):
                raise LogMissing("The log was removed while the flight was added. Send it again.")
            self._insert(connection, owner, flight_id, new, by)
            return one_flight(connection, owner, flight_id), True

    def _insert(self, connection: Connection, owner: str, flight_id: str, new: NewFlight, by: str | None) -> None:
        now = utc_now()
        first = _first_with_log(connection, owner, new.aircraft, new.log_sha256)
        connection.execute(
            insert(flights).values(
                flight_id=flight_id,
                owner=owner,
                aircraft=new.aircraft,
                log_sha256=new.log_sha256,
                log_bytes=new.log_bytes,
                log_media_type=new.log_media_type,
                created_utc=now,
                flown_utc=new.flown_utc or now,
                duplicate_of=first,
                latest_number=1,
            )
        )
        _queue(connection, owner, flight_id, 1, new.aircraft, new.settings)
        note(connection, owner, by, Action.FLIGHT_ADDED, flight_id, {"aircraft": new.aircraft, "duplicate_of": first})

    def find_once(self, owner: str, once: Once) -> tuple[str, int] | None:
        """(flight, number of the reduction) that an earlier request with this key made. Raises IdempotencyConflict."""
        with reading(self._engine) as connection:
            return idempotency.find(connection, owner, once)

    def get(self, owner: str, flight_id: str) -> FlightRecord:
        """Raises NotKept."""
        with reading(self._engine) as connection:
            return one_flight(connection, owner, flight_id)

    def list(
        self,
        owner: str,
        filters: FlightFilters | None = None,
        *,
        cursor: str | None = None,
        limit: int = 50,
        summaries: bool = False,
    ) -> Page[FlightRecord]:
        """A page of flights, the newest first. Without `summaries` (they are long) those of the records are None.

        Raises
        ------
        WrongValues : cursor or limit.
        """
        count = checked_limit(limit)
        wanted = _narrowed(select_flights(owner, summaries=summaries), filters or FlightFilters())
        if cursor is not None:
            wanted = wanted.where(flights.c.flight_id < read_cursor(CURSOR, cursor, is_flight_id))
        if filters and filters.aircraft is not None and not is_name(filters.aircraft):
            return Page((), None)
        with reading(self._engine) as connection:
            rows = connection.execute(wanted.order_by(flights.c.flight_id.desc()).limit(count + 1)).all()
        return page_of(
            [flight_of(row._mapping) for row in rows], count, lambda last: write_cursor(CURSOR, last.flight_id)
        )

    def add_reduction(
        self,
        owner: str,
        flight_id: str,
        settings: Mapping[str, Any],
        *,
        once: Once | None = None,
        by: str | None = None,
    ) -> tuple[ReductionRecord, bool]:
        """Queue another reduction of a flight; (the reduction, whether it is new). Earlier ones stay.

        Raises
        ------
        NotKept, LogGone, IdempotencyConflict, WrongValues
        """
        with writing(self._engine) as connection:
            row = locked_flight(connection, owner, flight_id)
            number = row["latest_number"] + 1
            if once and (earlier := idempotency.reserve(connection, owner, once, flight_id, number)):
                return one_reduction(connection, owner, *earlier), False
            if row["log_deleted_utc"] is not None:
                raise LogGone("The log of this flight is no longer kept, so it cannot be reduced again.")
            _queue(connection, owner, flight_id, number, row["aircraft"], settings)
            connection.execute(_update(flight_id).values(latest_number=number))
            note(connection, owner, by, Action.REDUCTION_ADDED, flight_id, {"number": number})
            return one_reduction(connection, owner, flight_id, number), True

    def reductions(self, owner: str, flight_id: str) -> tuple[ReductionRecord, ...]:
        """All of a flight, by number. Raises NotKept."""
        check_flight_id(flight_id)
        with reading(self._engine) as connection:
            rows = connection.execute(select_reductions(owner, flight_id).order_by(reductions.c.number)).all()
        if not rows:
            raise NotKept(NO_FLIGHT)
        return tuple(reduction_of(row._mapping, "reductions") for row in rows)

    def reduction(self, owner: str, flight_id: str, number: int) -> ReductionRecord:
        """Raises NotKept."""
        with reading(self._engine) as connection:
            return one_reduction(connection, owner, flight_id, number)

    def newest_done(self, owner: str, flight_id: str) -> ReductionRecord | None:
        """What the parts of the flight show; None while none is done. Raises NotKept."""
        return self.get(owner, flight_id).done

    def exclude(self, owner: str, flight_id: str, why: str, *, by: str | None = None) -> FlightRecord:
        """Leave the flight out of the pool. Raises NotKept, WrongValues."""
        said = reason(why)
        with writing(self._engine) as connection:
            locked_flight(connection, owner, flight_id)
            connection.execute(_update(flight_id).values(exclusion_reason=said, excluded_utc=utc_now()))
            note(connection, owner, by, Action.FLIGHT_EXCLUDED, flight_id, {"reason": said})
            return one_flight(connection, owner, flight_id)

    def readmit(self, owner: str, flight_id: str, *, by: str | None = None) -> FlightRecord:
        """Take it back into the pool; nothing happens to one that is in it. Raises NotKept."""
        with writing(self._engine) as connection:
            if locked_flight(connection, owner, flight_id)["exclusion_reason"] is not None:
                connection.execute(_update(flight_id).values(exclusion_reason=None, excluded_utc=None))
                note(connection, owner, by, Action.FLIGHT_READMITTED, flight_id)
            return one_flight(connection, owner, flight_id)

    def delete(self, owner: str, flight_id: str, *, by: str | None = None) -> Deleted:
        """The flight, its results and its idempotency key go; a job under way is fenced out. Raises NotKept.

        The first of its duplicates takes its place.
        """
        check_flight_id(flight_id)
        with writing(self._engine) as connection:
            sha256 = connection.scalar(_mine(owner, flight_id).with_only_columns(flights.c.log_sha256))
            if sha256 is None:
                raise NotKept(NO_FLIGHT)
            lock_log(connection, sha256)
            locked_flight(connection, owner, flight_id)
            of_it = select(reductions.c.series_key).where(
                reductions.c.flight_id == flight_id, reductions.c.series_key.is_not(None)
            )
            series_keys = tuple(connection.scalars(of_it.order_by(reductions.c.number)))
            _promote_duplicate(connection, flight_id)
            connection.execute(delete(flights).where(flights.c.flight_id == flight_id))
            note(connection, owner, by, Action.FLIGHT_DELETED, flight_id)
            return Deleted(sha256, references(connection, sha256) == 0, series_keys)

    def find_duplicate(self, owner: str, aircraft_called: str | None, sha256: str) -> str | None:
        """The first flight of this aircraft (None: of no aircraft) with that log."""
        if aircraft_called is not None and not is_name(aircraft_called):
            return None
        with reading(self._engine) as connection:
            return _first_with_log(connection, owner, aircraft_called, sha256)

    def results_of(self, owner: str, aircraft_called: str) -> tuple[PooledFlight, ...]:
        """What may be pooled for an aircraft, in the order flown (`pool.py`). Raises NotKept."""
        with reading(self._engine) as connection:
            return pool.results_of(connection, owner, aircraft_called)


def locked_flight(connection: Connection, owner: str | None, flight_id: str) -> RowMapping:
    """The flight's row, held until the transaction ends. Raises NotKept."""
    check_flight_id(flight_id)
    row = connection.execute(_mine(owner, flight_id).with_for_update()).one_or_none()
    if row is None:
        raise NotKept(NO_FLIGHT)
    return row._mapping


def _mine(owner: str | None, flight_id: str) -> Select[Any]:
    wanted = select(flights).where(flights.c.flight_id == flight_id)
    return wanted if owner is None else wanted.where(flights.c.owner == owner)


def _update(flight_id: str) -> Any:
    return update(flights).where(flights.c.flight_id == flight_id)


def _narrowed(wanted: Select[Any], filters: FlightFilters) -> Select[Any]:
    if filters.aircraft is not None:
        wanted = wanted.where(flights.c.aircraft == filters.aircraft)
    if filters.verdict is not None:
        wanted = wanted.where(flights.c.verdict == filters.verdict)
    if filters.state is not None:
        wanted = wanted.where(*_latest_is(filters.state))
    if filters.from_utc is not None:
        wanted = wanted.where(flights.c.flown_utc >= filters.from_utc)
    if filters.to_utc is not None:
        wanted = wanted.where(flights.c.flown_utc <= filters.to_utc)
    return wanted


def _latest_is(state: JobState) -> list[ColumnElement[bool]]:
    states = [str(each) for each in ((JobState.FAILED, JobState.CANCELLED) if state is JobState.FAILED else (state,))]
    wanted: list[ColumnElement[bool]] = [latest.c.state.in_(states)]
    if state is not JobState.DONE:
        # few flights among many: their index leads
        rare = select(reductions.c.flight_id).where(reductions.c.state.in_(states), text(NOT_DONE))
        wanted.append(flights.c.flight_id.in_(rare))
    return wanted


def _first_with_log(connection: Connection, owner: str, aircraft_called: str | None, sha256: str) -> str | None:
    return connection.scalar(
        select(flights.c.flight_id)
        .where(
            flights.c.log_sha256 == sha256,
            flights.c.owner == owner,
            flights.c.aircraft.is_not_distinct_from(aircraft_called),
            flights.c.duplicate_of.is_(None),
        )
        .order_by(flights.c.flight_id)
        .limit(1)
    )


def _promote_duplicate(connection: Connection, flight_id: str) -> None:
    duplicates = select(flights.c.flight_id).where(flights.c.duplicate_of == flight_id)
    heir = connection.scalar(duplicates.order_by(flights.c.flight_id).limit(1))
    if heir is not None:
        connection.execute(_update(heir).values(duplicate_of=None))
        connection.execute(update(flights).where(flights.c.duplicate_of == flight_id).values(duplicate_of=heir))


def _queue(
    connection: Connection,
    owner: str,
    flight_id: str,
    number: int,
    aircraft_called: str | None,
    settings: Mapping[str, Any],
) -> None:
    """The row of a reduction is its job. It takes the aircraft's profile as it is now."""
    of_aircraft = select(aircraft.c.profile, aircraft.c.profile_version).where(
        aircraft.c.owner == owner, aircraft.c.name == aircraft_called
    )
    profile, version = connection.execute(of_aircraft).one() if aircraft_called is not None else ({}, None)
    connection.execute(
        insert(reductions).values(
            flight_id=flight_id,
            number=number,
            settings=settings,
            profile=profile,
            profile_version=version,
            state=JobState.QUEUED,
            attempts=0,
            fence=0,
            progress=0.0,
            cancel_requested=False,
            created_utc=utc_now(),
        )
    )

"""What is to go: old logs and results, and files that no row holds any more.

These ask over all owners; no request of a client comes here.
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Column, Connection, Engine, Select, exists, func, select, text, update

from service.storage import idempotency
from service.storage.audit import Action, note
from service.storage.clock import utc_now
from service.storage.engine import reading, writing
from service.storage.locks import lock_log
from service.storage.tables import OPEN_STATES, flights, reductions

AT_ONCE = 500
"""Values asked for in one statement: SQLite takes no more than some thousands."""


@dataclass(frozen=True, slots=True)
class KeptLog:
    owner: str
    flight_id: str
    log_sha256: str


class Retention:
    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def logs_older_than(self, before_utc: datetime, limit: int = 100) -> tuple[KeptLog, ...]:
        """Flights added before `before_utc` that still have their log and no open job, the oldest first."""
        return self._logs(_older(before_utc).where(flights.c.log_deleted_utc.is_(None)).limit(limit))

    def results_older_than(self, before_utc: datetime, limit: int = 100) -> tuple[KeptLog, ...]:
        """Flights added before `before_utc` without an open job, the oldest first."""
        return self._logs(_older(before_utc).limit(limit))

    def mark_log_deleted(self, owner: str, flight_id: str) -> bool:
        """The flight's log is no longer kept (the results stay); False if it was so before. Then `drop_log`."""
        with writing(self._engine) as connection:
            marked = connection.execute(
                update(flights)
                .where(flights.c.owner == owner, flights.c.flight_id == flight_id, flights.c.log_deleted_utc.is_(None))
                .values(log_deleted_utc=utc_now())
            ).rowcount
            if marked:
                note(connection, owner, None, Action.LOG_DELETED, flight_id)
            return bool(marked)

    def drop_log(self, log_sha256: str, delete: Callable[[str], Any]) -> bool:
        """Call `delete` with the log's hash if no flight holds it, while no flight of that log can be added."""
        with writing(self._engine) as connection:
            lock_log(connection, log_sha256)
            free = references(connection, log_sha256) == 0
            if free:
                delete(log_sha256)
            return free

    def log_references(self, log_sha256: str) -> int:
        """How many flights hold that log."""
        with reading(self._engine) as connection:
            return references(connection, log_sha256)

    def held_logs(self, log_sha256s: Iterable[str]) -> frozenset[str]:
        """Those of the given logs that some flight holds."""
        holds = select(flights.c.log_sha256).where(flights.c.log_deleted_utc.is_(None))
        return self._held(holds, flights.c.log_sha256, log_sha256s)

    def held_series(self, series_keys: Iterable[str]) -> frozenset[str]:
        """Those of the given keys that some reduction holds."""
        return self._held(select(reductions.c.series_key), reductions.c.series_key, series_keys)

    def forget_once(self, before_utc: datetime) -> int:
        """Drop idempotency keys taken before `before_utc`; how many went."""
        with writing(self._engine) as connection:
            return idempotency.forget(connection, before_utc)

    def _logs(self, wanted: Select[Any]) -> tuple[KeptLog, ...]:
        with reading(self._engine) as connection:
            return tuple(KeptLog(*row) for row in connection.execute(wanted))

    def _held(self, holds: Select[Any], column: Column[Any], asked: Iterable[str]) -> frozenset[str]:
        names = list(asked)
        held: set[str] = set()
        with reading(self._engine) as connection:
            for start in range(0, len(names), AT_ONCE):
                held.update(connection.scalars(holds.where(column.in_(names[start : start + AT_ONCE]))))
        return frozenset(held)


def references(connection: Connection, log_sha256: str) -> int:
    """How many flights hold a log."""
    holders = select(func.count()).where(flights.c.log_sha256 == log_sha256, flights.c.log_deleted_utc.is_(None))
    return connection.scalar(holders) or 0


def _older(before_utc: datetime) -> Select[Any]:
    busy = exists().where(reductions.c.flight_id == flights.c.flight_id, text(OPEN_STATES))
    return (
        select(flights.c.owner, flights.c.flight_id, flights.c.log_sha256)
        .where(flights.c.created_utc < before_utc, ~busy)
        .order_by(flights.c.created_utc)
    )

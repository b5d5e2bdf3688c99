"""The audit trail: who did what to which thing, and when. Notes outlive the things."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from typing import Any

from sqlalchemy import Connection, Engine, Row, insert, select

from service.storage.clock import utc_now
from service.storage.engine import reading, writing
from service.storage.pages import checked_limit
from service.storage.tables import audit


class Action(StrEnum):
    """What the stores note by themselves; others may note actions of their own."""

    FLIGHT_ADDED = "flight added"
    FLIGHT_DELETED = "flight deleted"
    FLIGHT_EXCLUDED = "flight excluded"
    FLIGHT_READMITTED = "flight readmitted"
    LOG_DELETED = "log deleted"
    REDUCTION_ADDED = "reduction added"
    REDUCTION_CANCELLED = "reduction cancelled"
    AIRCRAFT_CHANGED = "aircraft changed"
    INSTALLATION_CHANGED = "installation changed"
    KEY_ADDED = "key added"
    KEY_REVOKED = "key revoked"


@dataclass(frozen=True, slots=True)
class AuditNote:
    note_id: int
    at_utc: datetime
    owner: str
    """Whose thing it is about."""
    key_id: str | None
    """Who did it; None: the service itself, or anybody while access is open."""
    action: str
    object: str
    detail: Mapping[str, Any] | None


class AuditTrail:
    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def note(
        self, owner: str, key_id: str | None, action: str, object_: str, detail: Mapping[str, Any] | None = None
    ) -> None:
        """A note in a transaction of its own: for what is done outside the stores, as a log that was given out."""
        with writing(self._engine) as connection:
            note(connection, owner, key_id, action, object_, detail)

    def notes(self, owner: str, *, before: int | None = None, limit: int = 50) -> tuple[AuditNote, ...]:
        """The newest first; `before` is the `note_id` to go on from."""
        wanted = select(audit).where(audit.c.owner == owner)
        if before is not None:
            wanted = wanted.where(audit.c.note_id < before)
        with reading(self._engine) as connection:
            rows = connection.execute(wanted.order_by(audit.c.note_id.desc()).limit(checked_limit(limit)))
            return tuple(_note_of(row) for row in rows)


def note(
    connection: Connection,
    owner: str,
    key_id: str | None,
    action: str,
    object_: str,
    detail: Mapping[str, Any] | None = None,
) -> None:
    """A note in the transaction of what it is about."""
    connection.execute(
        insert(audit).values(
            at_utc=utc_now(), owner=owner, key_id=key_id, action=str(action), object=object_, detail=detail
        )
    )


def _note_of(row: Row[Any]) -> AuditNote:
    return AuditNote(**row._mapping)

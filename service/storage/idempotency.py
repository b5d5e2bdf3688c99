"""A request that is sent again with the same key gets the same answer, and does its work once.

The row is written in the transaction of the flight or reduction that the request makes. Two requests with one key that
run at once meet in the row's primary key: the second waits for the first to commit, and then finds it.
"""

from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection, delete, select

from service.storage.clock import utc_now
from service.storage.errors import IdempotencyConflict
from service.storage.tables import idempotency
from service.storage.texts import idempotency_key
from service.storage.upsert import insert_if_absent

KEPT_DAYS = 7


@dataclass(frozen=True, slots=True)
class Once:
    """The key of a request that is to be done once, and the SHA-256 (hexadecimal) of all that the request says."""

    key: str
    request_hash: str


def reserve(connection: Connection, owner: str, once: Once, flight_id: str, number: int) -> tuple[str, int] | None:
    """Take the key for what is about to be made; or give what it made before: (flight_id, number).

    Raises
    ------
    IdempotencyConflict : the key came with another request.
    """
    values = {
        "owner": owner,
        "key": idempotency_key(once.key),
        "request_hash": once.request_hash,
        "flight_id": flight_id,
        "number": number,
        "created_utc": utc_now(),
    }
    while not insert_if_absent(connection, idempotency, values):
        # it can be gone again, if its flight has just been deleted
        if earlier := find(connection, owner, once):
            return earlier
    return None


def find(connection: Connection, owner: str, once: Once) -> tuple[str, int] | None:
    """What the key made before; None: nothing. Raises as `reserve` does."""
    wanted = select(idempotency).where(idempotency.c.owner == owner, idempotency.c.key == idempotency_key(once.key))
    row = connection.execute(wanted).one_or_none()
    if row is None:
        return None
    if row.request_hash != once.request_hash:
        raise IdempotencyConflict("This idempotency key came before, with another request.")
    return row.flight_id, row.number


def forget(connection: Connection, before_utc: datetime) -> int:
    """Drop keys that were taken before `before_utc`; how many went."""
    return connection.execute(delete(idempotency).where(idempotency.c.created_utc < before_utc)).rowcount

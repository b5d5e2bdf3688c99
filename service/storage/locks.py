"""Locks that a transaction holds until its end. SQLite has but one writer at a time, so there they are nothing."""

import hashlib

from sqlalchemy import Connection, func, select


def lock_log(connection: Connection, log_sha256: str) -> None:
    """One transaction at a time adds or drops flights of one log: a duplicate is seen, and no file goes meanwhile.

    Take it before the lock of any flight's row, else two may wait for each other.
    """
    lock(connection, f"log {log_sha256}")


def lock(connection: Connection, name: str) -> None:
    if connection.dialect.name == "postgresql":
        number = int.from_bytes(hashlib.sha256(name.encode()).digest()[:8], "big", signed=True)
        connection.execute(select(func.pg_advisory_xact_lock(number)))

"""What time it is."""

import time
from datetime import UTC, datetime

from sqlalchemy import Connection, extract, func, select


def utc_now() -> datetime:
    """This machine's clock: when something was added or done."""
    return datetime.now(UTC)


def database_seconds(connection: Connection) -> float:
    """Seconds since 1970 on the clock that all who share the database share: leases are measured by it.

    PostgreSQL's own; with SQLite they all run on this machine.
    """
    if connection.dialect.name == "sqlite":
        return time.time()
    return float(connection.execute(select(extract("epoch", func.clock_timestamp()))).scalar_one())

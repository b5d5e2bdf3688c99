"""Engines and transactions, with each database's habits.

SQLite: a writing transaction takes the write lock at its beginning. One that reads first and writes later is told
"database is locked" at once, whatever the time-out, when another has written in between. Every commit reaches the disk
(`synchronous=FULL`): what was acknowledged survives a loss of power.

An engine belongs to one process: make it after a fork.
"""

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import URL, Connection, Engine, create_engine, event, make_url
from sqlalchemy.exc import DBAPIError
from sqlalchemy.exc import TimeoutError as PoolTimeout

from service.storage.errors import StorageUnavailable

SQLITE_FILE = "loiterwise.sqlite"
WAIT_S = 10
"""How long a statement waits for another's lock, a caller for a connection, and a connection for its server."""
SLOWEST_STATEMENT_S = 60
WAL_BYTES = 64 * 1024 * 1024
"""To which the write-ahead log is cut back."""
WRITING = "loiterwise_writing"

SQLITE_OPERATIONAL = frozenset(
    {
        sqlite3.SQLITE_BUSY,
        sqlite3.SQLITE_LOCKED,
        sqlite3.SQLITE_READONLY,
        sqlite3.SQLITE_INTERRUPT,
        sqlite3.SQLITE_IOERR,
        sqlite3.SQLITE_FULL,
        sqlite3.SQLITE_CANTOPEN,
        sqlite3.SQLITE_PROTOCOL,
        sqlite3.SQLITE_NOMEM,
    }
)
"""Primary result codes that the machine causes; the others (no such table, a constraint) are bugs."""
READ_ONLY_TRANSACTION = "25006"
"""PostgreSQL's SQLSTATE of a server that stands by; the driver does not count it as operational."""
UNAVAILABLE = "The database cannot be used just now. Nothing of this request was kept; try again."


def sqlite_url(folder: Path) -> URL:
    """URL of the database file in a data folder."""
    return URL.create("sqlite", database=str(folder / SQLITE_FILE))


def database_url(given: str | URL) -> URL:
    """`given` with the driver that we use; `postgres://` is what some platforms write.

    Raises
    ------
    ValueError : it is no URL of SQLite or PostgreSQL. The text never shows it, for it may hold a password.
    """
    text = given.replace("postgres://", "postgresql://", 1) if isinstance(given, str) else given
    try:
        url = make_url(text)
    except Exception:  # its message would show the whole text
        raise ValueError("it is no URL of a database") from None
    backend = url.get_backend_name()
    if backend not in ("sqlite", "postgresql"):
        raise ValueError("only SQLite and PostgreSQL are known")
    return url.set(drivername="postgresql+psycopg") if backend == "postgresql" else url


def open_engine(url: str | URL) -> Engine:
    """The engine of this process. It connects when it is first used."""
    known = database_url(url)
    return _sqlite(known) if known.get_backend_name() == "sqlite" else _postgresql(known)


@contextmanager
def writing(engine: Engine) -> Iterator[Connection]:
    """A transaction that writes: committed at the end, undone when anything is raised.

    Raises
    ------
    StorageUnavailable : disk full, read-only, a lock not to be had in time, the connection lost.
    """
    with operational_failures(), engine.connect() as connection:
        connection.execution_options(**{WRITING: True})
        with connection.begin():
            yield connection


@contextmanager
def reading(engine: Engine) -> Iterator[Connection]:
    """A transaction that only reads. Raises as `writing` does."""
    with operational_failures(), engine.connect() as connection:
        yield connection


@contextmanager
def operational_failures() -> Iterator[None]:
    """Turn what the machine or the network causes into `StorageUnavailable`; bugs stay what they are."""
    try:
        yield
    except (DBAPIError, sqlite3.Error) as error:
        if _is_operational(error):
            raise StorageUnavailable(UNAVAILABLE) from error
        raise
    except PoolTimeout as error:
        raise StorageUnavailable(UNAVAILABLE) from error


def _is_operational(error: Exception) -> bool:
    cause = error.orig if isinstance(error, DBAPIError) else error
    if isinstance(cause, sqlite3.Error):
        return getattr(cause, "sqlite_errorcode", 0) & 0xFF in SQLITE_OPERATIONAL
    kinds = {kind.__name__ for kind in type(cause).__mro__}
    return bool(kinds & {"OperationalError", "InterfaceError"}) or _sqlstate(cause) == READ_ONLY_TRANSACTION


def _sqlstate(cause: object) -> str | None:
    return getattr(cause, "sqlstate", None)


def _sqlite(url: URL) -> Engine:
    engine = create_engine(url, connect_args={"timeout": WAIT_S}, pool_timeout=WAIT_S, hide_parameters=True)
    event.listen(engine, "connect", _prepare_sqlite)
    event.listen(engine, "begin", _begin_sqlite)
    return engine


def _prepare_sqlite(connection: Any, _record: object) -> None:
    # no transactions of the driver's own making
    connection.isolation_level = None
    for pragma in (
        f"busy_timeout={WAIT_S * 1000}",
        "journal_mode=WAL",
        "synchronous=FULL",
        "foreign_keys=ON",
        f"journal_size_limit={WAL_BYTES}",
    ):
        connection.execute(f"PRAGMA {pragma}").close()


def _begin_sqlite(connection: Connection) -> None:
    write = connection.get_execution_options().get(WRITING, False)
    connection.exec_driver_sql("BEGIN IMMEDIATE" if write else "BEGIN")


def _postgresql(url: URL) -> Engine:
    engine = create_engine(
        url,
        isolation_level="READ COMMITTED",
        connect_args={"connect_timeout": WAIT_S} | _keepalives(),
        pool_pre_ping=True,
        pool_timeout=WAIT_S,
        # what clients sent stays out of messages, for those are logged
        hide_parameters=True,
    )
    event.listen(engine, "connect", _prepare_postgresql)
    return engine


def _keepalives() -> dict[str, int]:
    # a server that vanished without a word is noticed after about 20 s
    return {"keepalives": 1, "keepalives_idle": 10, "keepalives_interval": 5, "keepalives_count": 2}


def _prepare_postgresql(connection: Any, _record: object) -> None:
    for setting in (
        f"lock_timeout = '{WAIT_S}s'",
        f"statement_timeout = '{SLOWEST_STATEMENT_S}s'",
        # a process that was stopped in the middle holds its locks no longer than this
        f"idle_in_transaction_session_timeout = '{SLOWEST_STATEMENT_S}s'",
    ):
        connection.execute(f"SET SESSION {setting}")
    connection.commit()

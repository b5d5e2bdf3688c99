"""Bring a database to the tables of this version: once, however many processes start at the same time."""

import fcntl
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from alembic import command
from alembic.config import Config
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import URL, Connection, Engine, event, text

from service.storage.engine import UNAVAILABLE, database_url, open_engine, reading, writing
from service.storage.errors import DatabaseTooNew, StorageUnavailable
from service.storage.locks import lock

SCRIPTS = Path(__file__).parent / "migrations"
LOCK_SUFFIX = ".migrating"


def bring_up_to_date(url: str | URL) -> None:
    """Create or change the tables as far as it is needed; all of it or nothing.

    Raises
    ------
    StorageUnavailable : the database or its folder cannot be written.
    DatabaseTooNew : a newer version of the service has changed it.
    """
    known = database_url(url)
    engine = _engine_to_migrate(known)
    try:
        with _one_process(known):
            if not is_up_to_date(engine):
                _upgrade(engine)
    finally:
        engine.dispose()


def is_up_to_date(engine: Engine) -> bool:
    """Whether the tables are those of this version. Raises as `bring_up_to_date` does."""
    with reading(engine) as connection:
        found = MigrationContext.configure(connection).get_current_revision()
    scripts = ScriptDirectory.from_config(alembic_config())
    if found is not None and found not in {script.revision for script in scripts.walk_revisions()}:
        raise DatabaseTooNew("The database was changed by a newer version of the service. Start that one.")
    return found == scripts.get_current_head()


def alembic_config(connection: Connection | None = None) -> Config:
    config = Config()
    config.set_main_option("script_location", str(SCRIPTS).replace("%", "%%"))
    # paths with blanks or colons stay one path
    config.set_main_option("path_separator", "newline")
    config.attributes["connection"] = connection
    return config


def _upgrade(engine: Engine) -> None:
    sqlite = engine.dialect.name == "sqlite"
    with writing(engine) as connection:
        if not sqlite:
            # others wait here for the first, however long it takes
            connection.execute(text("SET LOCAL lock_timeout = 0"))
            connection.execute(text("SET LOCAL statement_timeout = 0"))
            lock(connection, "loiterwise migration")
        command.upgrade(alembic_config(connection), "head")
        if sqlite and connection.execute(text("PRAGMA foreign_key_check")).first() is not None:
            raise RuntimeError("a migration has left rows that refer to nothing")


def _engine_to_migrate(url: URL) -> Engine:
    """Without foreign keys in SQLite: there a table is changed by dropping it, which would take its children along."""
    engine = open_engine(url)
    if engine.dialect.name == "sqlite":
        event.listen(
            engine, "connect", lambda connection, _record: connection.execute("PRAGMA foreign_keys=OFF").close()
        )
    return engine


@contextmanager
def _one_process(url: URL) -> Iterator[None]:
    """SQLite: one process at a time, by a lock beside the file. PostgreSQL locks within the transaction."""
    path = url.database
    if url.get_backend_name() != "sqlite" or not path:
        yield
        return
    try:
        Path(path).parent.mkdir(parents=True, exist_ok=True)
        holder = open(path + LOCK_SUFFIX, "w")  # noqa: SIM115
    except OSError as error:
        raise StorageUnavailable(UNAVAILABLE) from error
    with holder:
        fcntl.flock(holder, fcntl.LOCK_EX)
        yield

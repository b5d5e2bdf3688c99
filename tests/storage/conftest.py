"""Every test that asks for `engine` runs on SQLite and on a real PostgreSQL, and finds the tables empty."""

import shutil
from collections.abc import Iterator
from itertools import count
from pathlib import Path

import pytest
from sqlalchemy import URL, Engine

from service.storage.engine import open_engine, sqlite_url
from service.storage.migrate import bring_up_to_date
from service.storage.tables import metadata
from tests.storage.postgresql_server import running_server

SQLITE = "sqlite"
POSTGRESQL = "postgresql"

_numbers = count()


@pytest.fixture(params=[SQLITE, POSTGRESQL])
def database(request: pytest.FixtureRequest) -> str:
    """Which of the two."""
    return str(request.param)


@pytest.fixture
def empty_url(database: str, tmp_path: Path) -> URL:
    """A database without tables."""
    return sqlite_url(tmp_path) if database == SQLITE else _new_postgresql()


@pytest.fixture(scope="session")
def sqlite_template(tmp_path_factory: pytest.TempPathFactory) -> Path:
    url = sqlite_url(tmp_path_factory.mktemp("template"))
    bring_up_to_date(url)
    assert url.database is not None
    return Path(url.database)


@pytest.fixture(scope="session")
def postgresql_shared() -> URL:
    """A database with tables; a new one for each test would take a third of a second."""
    url = _new_postgresql()
    bring_up_to_date(url)
    return url


@pytest.fixture
def url(database: str, tmp_path: Path, request: pytest.FixtureRequest) -> URL:
    """A database with the empty tables of this version, whose definitions the test leaves alone."""
    if database == POSTGRESQL:
        shared: URL = request.getfixturevalue("postgresql_shared")
        running_server().empty(str(shared.database), [table.name for table in metadata.sorted_tables])
        return shared
    made = sqlite_url(tmp_path)
    shutil.copy(request.getfixturevalue("sqlite_template"), str(made.database))
    return made


@pytest.fixture
def engine(url: URL) -> Iterator[Engine]:
    opened = open_engine(url)
    yield opened
    opened.dispose()


@pytest.fixture
def own_url(empty_url: URL) -> URL:
    """A database with tables, of the test alone."""
    bring_up_to_date(empty_url)
    return empty_url


def _new_postgresql() -> URL:
    server = running_server()
    name = f"test_{next(_numbers)}"
    server.execute(f"CREATE DATABASE {name}")
    return server.url(name)

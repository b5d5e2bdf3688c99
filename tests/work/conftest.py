"""A workshop on SQLite and on PostgreSQL, and one nursery for the whole run."""

from collections.abc import Iterator
from pathlib import Path

import pytest
from sqlalchemy import URL, Engine

from service.storage.log_store import open_store
from service.work.children import Nursery
from service.work.settings import MIB, WorkSettings
from tests.storage.conftest import (  # noqa: F401 - fixtures
    database,
    empty_url,
    engine,
    own_url,
    postgresql_shared,
    sqlite_template,
    url,
)
from tests.work.reducers import OBEY
from tests.work.workshop import Workshop


@pytest.fixture
def settings(url: URL, tmp_path: Path) -> WorkSettings:  # noqa: F811
    return WorkSettings(
        database=url.render_as_string(hide_password=False),
        store=str(tmp_path / "data"),
        spool=str(tmp_path / "spool"),
        job_seconds=20.0,
        job_memory_bytes=256 * MIB,
        lease_s=0.6,
        grace_s=10.0,
        reducer=OBEY,
    )


@pytest.fixture
def workshop(settings: WorkSettings, engine: Engine, tmp_path: Path) -> Workshop:  # noqa: F811
    return Workshop(tmp_path, engine, settings, open_store(settings.store))


@pytest.fixture(scope="session")
def nursery() -> Iterator[Nursery]:
    """It knows neither database nor store: those come with each order."""
    with Nursery(WorkSettings(database="", store="", spool="", reducer=OBEY)) as started:
        # from the main thread, which stays
        started.start()
        yield started

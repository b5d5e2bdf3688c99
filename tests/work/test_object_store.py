"""Children whose logs and series rest in an object store: its client's threads begin anew in each."""

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest
from sqlalchemy import Engine

from service.domain.kept import JobState
from service.storage.log_store import open_store
from service.storage.series_store import SeriesPart, SeriesStore
from service.work.children import Nursery
from service.work.settings import WorkSettings
from tests.storage.conftest import SQLITE
from tests.storage.object_server import ObjectServer, store_of_tests
from tests.work.workshop import Workshop, wait_until, working


@pytest.fixture
def database() -> str:
    return SQLITE


@pytest.fixture
def server(monkeypatch: pytest.MonkeyPatch) -> Iterator[ObjectServer]:
    store_of_tests(monkeypatch)
    running = ObjectServer()
    yield running
    running.close()


@pytest.fixture
def workshop(settings: WorkSettings, engine: Engine, tmp_path: Path, server: ObjectServer) -> Workshop:
    bucket = server.new_bucket()
    return Workshop(tmp_path, engine, replace(settings, store=bucket), open_store(bucket))


def test_logs_and_series_in_an_object_store(workshop: Workshop) -> None:
    flights = [workshop.add(("mark", str(number))) for number in range(2)]
    with Nursery(workshop.settings) as nursery:
        nursery.start()
        with working(workshop, nursery):
            wait_until(lambda: all(workshop.job(flight).state is JobState.DONE for flight in flights))
        for flight in flights:
            part = SeriesStore(workshop.blobs).read(f"series/{flight}/1", "airspeed")
            assert isinstance(part, SeriesPart)
            assert part.flags.size == 3
        assert list(Path(workshop.settings.spool).iterdir()) == []

"""A client of the application, with uploads in a folder of the test; and one that keeps flights, with a worker."""

import json
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, NamedTuple

import pytest
from flask.testing import FlaskClient
from werkzeug.test import TestResponse

from service.app import create_app
from service.config import Config
from service.domain.results import Reduction
from service.keeping import Keeping, Stores, store_of
from tests import made
from tests.contract.inline_jobs import run_waiting_jobs

Result = Callable[..., Reduction]
FLIGHTS = "/v1/flights"


@pytest.fixture
def config(tmp_path: Path) -> Config:
    return Config(data=tmp_path / "data", wait_s=0.0)


@pytest.fixture
def client(config: Config) -> FlaskClient:
    """The real application: reading and reduction included."""
    return create_app(config).test_client()


@pytest.fixture
def reduced(monkeypatch: pytest.MonkeyPatch) -> None:
    """Every readable submission is answered with the same reduction made by hand, without reading or reducing."""
    monkeypatch.setattr("service.http.reductions.reduce_file", lambda *_arguments, **_named: made.reduction())


class KeptClient(NamedTuple):
    """An application that keeps flights. Its jobs run when told, in this process."""

    client: FlaskClient
    stores: Stores
    config: Config

    def add(self, batch: Any = None, *, key: str | None = None, **more: Any) -> TestResponse:
        """POST a batch without waiting for its reduction."""
        headers = {"Prefer": "respond-async"} | more.pop("headers", {})
        if key is not None:
            headers["Idempotency-Key"] = key
        body = json.dumps(made.batch() if batch is None else batch)
        query = more.pop("query", "")
        return self.client.post(FLIGHTS + query, data=body, content_type="application/json", headers=headers, **more)

    def added(self, batch: Any = None, **more: Any) -> str:
        """Id of a flight that is added and reduced."""
        answer = self.add(batch, **more)
        assert answer.status_code in {201, 202}, answer.text
        self.run_jobs()
        return str(answer.get_json()["flight"])

    def run_jobs(self) -> int:
        return run_waiting_jobs(self.stores, store_of(self.config))

    def get(self, path: str, **more: Any) -> Any:
        """JSON of a GET that must succeed; `path` after `/v1/flights/`."""
        answer = self.client.get(f"{FLIGHTS}/{path}", **more)
        assert answer.status_code == 200, answer.text
        return answer.get_json()

    def logs(self) -> list[str]:
        """What the log store holds."""
        return sorted(log.sha256 for log in self.stores.logs.list())

    @contextmanager
    def worker(self) -> Iterator[None]:
        """A worker in a thread, for as long as the context."""
        stop = threading.Event()

        def work() -> None:
            while not stop.wait(0.02):
                self.run_jobs()

        thread = threading.Thread(target=work)
        thread.start()
        try:
            yield
        finally:
            stop.set()
            thread.join()


def kept_client(config: Config) -> KeptClient:
    app = create_app(config)
    keeping: Keeping = app.extensions["keeping"]
    return KeptClient(app.test_client(), keeping.stores(), config)


@pytest.fixture(scope="module")
def kept(tmp_path_factory: pytest.TempPathFactory) -> KeptClient:
    """One for a module: its tests share flights and must not mind each other's."""
    return kept_client(Config(data=tmp_path_factory.mktemp("kept"), log_level="ERROR"))


@pytest.fixture
def fresh(tmp_path: Path) -> KeptClient:
    """One of the test's own."""
    return kept_client(Config(data=tmp_path / "kept", log_level="ERROR", answer_wait_s=0.0, queue_limit=3))

"""A client of the application, with uploads in a folder of the test."""

from collections.abc import Callable
from pathlib import Path

import pytest
from flask.testing import FlaskClient

from service.app import create_app
from service.config import Config
from service.domain.results import Reduction
from tests import made

Result = Callable[..., Reduction]


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

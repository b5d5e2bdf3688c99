"""An object store of the S3 kind on loopback, in a thread of the tests: an emulator, no more than the protocol.

It tells what it was asked, and can be told to fail.
"""

import threading
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from itertools import count
from typing import Any

import pytest
from moto.moto_server.werkzeug_app import DomainDispatcherApplication, create_backend_app
from werkzeug.serving import WSGIRequestHandler, make_server
from werkzeug.wrappers import Request, Response

BUCKET_OWNER = {"AWS_ACCESS_KEY_ID": "kept", "AWS_SECRET_ACCESS_KEY": "secretly"}

_numbers = count()
"""All servers of a process have the same buckets."""

Trouble = Callable[[Request], Response | None]
"""Answers in place of the store, or lets it answer."""


@dataclass(frozen=True)
class Asked:
    method: str
    path: str
    sent_bytes: int
    answered_bytes: int


class _Quiet(WSGIRequestHandler):
    def log(self, type: str, message: str, *args: Any) -> None:
        pass


class ObjectServer:
    def __init__(self, port: int = 0) -> None:
        self._store = DomainDispatcherApplication(create_backend_app)
        self._server = make_server("127.0.0.1", port, self._answer, threaded=True, request_handler=_Quiet)
        self.asked: list[Asked] = []
        self.trouble: Trouble = lambda _request: None
        threading.Thread(target=self._server.serve_forever, args=(0.05,), daemon=True).start()

    @property
    def port(self) -> int:
        return self._server.server_port

    @property
    def endpoint(self) -> str:
        return f"http://127.0.0.1:{self.port}"

    def new_bucket(self) -> str:
        """URL of an empty place in a bucket of its own."""
        name = f"flights-{next(_numbers)}"
        request = Request.from_values(f"/{name}", self.endpoint, method="PUT")
        Response.from_app(self._store, request.environ)
        return f"s3://{name}/kept/here?endpoint={self.endpoint}&region=us-east-1"

    def forget(self) -> None:
        """Of what was asked, and of the trouble."""
        self.asked.clear()
        self.trouble = lambda _request: None

    def close(self) -> None:
        self._server.shutdown()
        self._server.server_close()

    def answer_of_store(self, request: Request) -> Response:
        return Response.from_app(self._store, request.environ, buffered=True)

    def _answer(self, environ: dict[str, Any], start_response: Any) -> Iterable[bytes]:
        request = Request(environ)
        answer = self.trouble(request) or self.answer_of_store(request)
        self.asked.append(Asked(request.method, request.path, request.content_length or 0, answer.content_length or 0))
        return answer(environ, start_response)


def store_of_tests(monkeypatch: pytest.MonkeyPatch) -> None:
    """The environment that a client of it needs."""
    for name, value in BUCKET_OWNER.items():
        monkeypatch.setenv(name, value)

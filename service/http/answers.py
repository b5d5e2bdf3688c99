"""Answers in JSON, and whether the client takes JSON."""

from typing import Any

from flask import Request, Response

from schemas.wire import encode
from service.http.failures import NothingAcceptable

JSON = "application/json"


def json_answer(document: Any) -> Response:
    """A JSON response that no cache keeps."""
    answer = Response(encode(document), mimetype=JSON)
    answer.headers["Cache-Control"] = "no-store"
    return answer


def require_json_accepted(request: Request) -> None:
    """Raise `NothingAcceptable` when `Accept` is there and leaves no room for JSON."""
    accepted = request.accept_mimetypes
    if request.headers.get("Accept") is not None and not accepted.quality(JSON) > 0:
        raise NothingAcceptable(f"The answer is written as {JSON} only, which the Accept header leaves out.")

"""Every error becomes a problem of RFC 9457 here, through one table of class -> status."""

import logging
from collections.abc import Mapping
from itertools import islice
from typing import Any, NamedTuple

from flask import Flask, Response
from werkzeug.exceptions import HTTPException

from schemas.problem import ProblemSchema
from schemas.wire import encode
from service.domain.errors import InputTooLarge, LoiterwiseError, UnreadableInput, WrongValues
from service.http.failures import (
    BodyCutShort,
    BodyNotSupported,
    KeyMissing,
    MissingPrecondition,
    NoRoom,
    NothingAcceptable,
    NotReducedYet,
    PreconditionFailed,
    QueueFull,
    ScopeMissing,
    TooBusy,
    UploadTooSlow,
)
from service.keeping import NothingKept
from service.log_lines import ROOT, request_id
from service.storage.errors import IdempotencyConflict, LogGone, NotKept, StorageUnavailable, VersionConflict

PROBLEM_JSON = "application/problem+json"
MOST_ERRORS = 100
"""Entries of `errors`: what repeats a thousandfold helps nobody, and an answer must not grow with the body."""
LONGEST_POINTER = 300
"""Characters of a pointer, for it holds names that the client made up."""

_log = logging.getLogger(ROOT)


class Kind(NamedTuple):
    """A kind of problem: its status, the anchor on the documentation page, its title."""

    status: int
    name: str
    title: str

    @property
    def type(self) -> str:
        return f"/docs#problem-{self.name}"


KINDS: dict[type[LoiterwiseError], Kind] = {
    UnreadableInput: Kind(400, "unreadable", "The body cannot be read"),
    BodyCutShort: Kind(400, "cut-short", "The body ended early"),
    KeyMissing: Kind(401, "key-missing", "A key is needed"),
    ScopeMissing: Kind(403, "scope-missing", "The key may not do this"),
    NotKept: Kind(404, "not-kept", "There is no such thing"),
    NotReducedYet: Kind(404, "no-result", "There is no result yet"),
    NothingAcceptable: Kind(406, "not-acceptable", "No acceptable form of the answer"),
    UploadTooSlow: Kind(408, "too-slow", "The upload was too slow"),
    IdempotencyConflict: Kind(409, "other-request", "The idempotency key came before with another request"),
    LogGone: Kind(409, "log-gone", "The log is no longer kept"),
    VersionConflict: Kind(412, "version-conflict", "It has been changed in the meantime"),
    PreconditionFailed: Kind(412, "precondition-failed", "The condition does not hold"),
    InputTooLarge: Kind(413, "too-large", "The input is too large"),
    BodyNotSupported: Kind(415, "not-supported", "The form of the body is not supported"),
    WrongValues: Kind(422, "wrong-values", "Values are wrong"),
    MissingPrecondition: Kind(428, "if-match-needed", "If-Match is needed"),
    TooBusy: Kind(503, "busy", "Too much work at once"),
    NoRoom: Kind(503, "no-room", "Uploads cannot be stored"),
    QueueFull: Kind(503, "queue-full", "The queue is full"),
    StorageUnavailable: Kind(503, "storage-unavailable", "What is kept cannot be reached"),
    NothingKept: Kind(503, "nothing-kept", "This server keeps no flights"),
}
COME_AGAIN: dict[type[LoiterwiseError], int] = {StorageUnavailable: 5}
"""Seconds for `Retry-After` where the failure itself names none."""
INTERNAL = Kind(500, "internal", "The service failed")


def register_errors(app: Flask) -> None:
    """Make `app` answer every error with a problem."""
    app.register_error_handler(LoiterwiseError, _answer_known)
    app.register_error_handler(HTTPException, _answer_http)
    app.register_error_handler(Exception, _answer_unexpected)


def kind_of(error: LoiterwiseError) -> Kind:
    """The table's entry for the nearest class of `error`."""
    return next(KINDS[cls] for cls in type(error).__mro__ if cls in KINDS)


def _answer_known(error: LoiterwiseError) -> Response:
    kind = kind_of(error)
    if kind.status >= 500:
        _log.warning(kind.title, extra={"fields": {"cause": str(error.__cause__ or error)}})
    return _problem(
        kind.type,
        kind.title,
        kind.status,
        str(error),
        errors=getattr(error, "errors", None),
        headers=_headers_of(error),
    )


def _headers_of(error: LoiterwiseError) -> dict[str, str]:
    seconds = next((COME_AGAIN[cls] for cls in type(error).__mro__ if cls in COME_AGAIN), None)
    waiting = {} if seconds is None else {"Retry-After": str(seconds)}
    return waiting | getattr(error, "headers", {})


def _answer_http(error: HTTPException) -> Response | HTTPException:
    """Problems of the framework: no route, wrong method, oversized body. Redirects stay what they are."""
    status = error.code or 500
    if status < 400:
        return error
    if status == KINDS[InputTooLarge].status:
        return _answer_known(InputTooLarge("The body is larger than this service takes."))
    kept = {name: value for name, value in error.get_headers() if name in ("Allow", "Retry-After")}
    return _problem("about:blank", error.name, status, error.description or error.name, headers=kept)


def _answer_unexpected(error: Exception) -> Response:
    _log.error("unexpected failure", exc_info=error)
    detail = "Something went wrong on our side. The log holds it under this request's id."
    return _problem(INTERNAL.type, INTERNAL.title, INTERNAL.status, detail)


def _problem(
    type_: str,
    title: str,
    status: int,
    detail: str,
    *,
    errors: Mapping[str, str] | None = None,
    headers: Mapping[str, str] | None = None,
) -> Response:
    body: dict[str, Any] = {"type": type_, "title": title, "status": status, "detail": detail}
    if errors:
        body["errors"] = {pointer[:LONGEST_POINTER]: text for pointer, text in islice(errors.items(), MOST_ERRORS)}
    if errors and len(errors) > MOST_ERRORS:
        body["detail"] += f" The first {MOST_ERRORS} of {len(errors)} errors are listed."
    body["request_id"] = request_id.get() or ""
    answer = Response(encode(ProblemSchema().dump(body)), status, mimetype=PROBLEM_JSON)
    answer.headers.update(headers or {})
    answer.headers["Cache-Control"] = "no-store"
    return answer

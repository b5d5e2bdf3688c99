"""What a client sent: a log in a file, and settings if they came beside it."""

import socket
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from flask import Request, g

from schemas.wire import decode
from service.config import Config
from service.domain.errors import InputTooLarge, UnreadableInput, WrongValues
from service.http.body_stream import SentBody, decoded
from service.http.failures import BodyNotSupported
from service.http.gunzip import CHUNK_BYTES, ByteSource
from service.http.multipart_body import read_parts
from service.http.pace import Pace
from service.http.spool import SpooledFile, spooled_file
from service.intake import MOST_BATCH_BYTES

JSON = "application/json"
MULTIPART = "multipart/form-data"
RAW = ("application/octet-stream", "text/csv", JSON)
READABLE = (*RAW, MULTIPART)
MOST_SETTINGS_BYTES = 1024 * 1024


@dataclass(frozen=True, slots=True)
class Submission:
    path: Path
    sha256: str
    size: int
    """Bytes."""
    settings: object | None
    """Decoded JSON of the part `settings`; None where none came."""


@contextmanager
def received(request: Request, config: Config) -> Iterator[Submission]:
    """Stream the request's body to disk; the file lives as long as the context.

    Raises the errors of `service.http.failures` and of the domain, each with its own status.
    """
    media_type = request.mimetype or RAW[0]
    if media_type not in READABLE:
        raise BodyNotSupported(
            f"Bodies are read as {', '.join(READABLE)}; the Content-Type says {media_type[:100]!r}.",
            {"Accept-Post": ", ".join(READABLE)},
        )
    with spooled_file(config.spool) as file:
        settings = _receive(request, config, file, media_type)
        file.finish()
        _check_json(file, media_type)
        yield Submission(file.path, file.sha256, file.size, settings)


def received_json(request: Request, config: Config) -> object:
    """A small JSON body: a profile, settings, a reason. Raises as `received` does."""
    if request.mimetype != JSON:
        raise BodyNotSupported(
            f"This body is read as {JSON}; the Content-Type says {request.mimetype[:100]!r}.", {"Accept-Post": JSON}
        )
    with Pace(_connection(request), config.min_upload_rate, config.upload_grace_s) as pace:
        sent = SentBody(request, min(config.max_upload_bytes, MOST_SETTINGS_BYTES), pace)
        try:
            source = decoded(request, sent, MOST_SETTINGS_BYTES)
            body = bytearray()
            while chunk := source.read(CHUNK_BYTES):
                body += chunk
        finally:
            g.received_bytes = sent.received
    return decode(bytes(body))


def _receive(request: Request, config: Config, file: SpooledFile, media_type: str) -> object | None:
    most = MOST_BATCH_BYTES if media_type == JSON else sys.maxsize
    with Pace(_connection(request), config.min_upload_rate, config.upload_grace_s) as pace:
        sent = SentBody(request, min(config.max_upload_bytes, most), pace)
        try:
            source = decoded(request, sent, min(config.max_decoded_bytes, most))
            return _write(request, source, file, media_type)
        finally:
            g.received_bytes = sent.received


def _connection(request: Request) -> socket.socket | None:
    """The client's socket, where the server hands it on."""
    connection = request.environ.get("gunicorn.socket")
    return connection if isinstance(connection, socket.socket) else None


def _write(request: Request, source: ByteSource, file: SpooledFile, media_type: str) -> object | None:
    if media_type == MULTIPART:
        return _write_parts(source, file, request.mimetype_params.get("boundary"))
    while chunk := source.read(CHUNK_BYTES):
        file.write(chunk)
    return None


def _write_parts(source: ByteSource, file: SpooledFile, boundary: str | None) -> object | None:
    settings = bytearray()

    def write_settings(data: bytes) -> None:
        settings.extend(data)
        if len(settings) > MOST_SETTINGS_BYTES:
            raise InputTooLarge(f"The part `settings` is larger than {MOST_SETTINGS_BYTES} bytes.")

    met = read_parts(source, boundary, {"log": file.write, "settings": write_settings})
    if "log" not in met:
        raise WrongValues("The part `log` is missing.", {"/log": "is required"})
    return decode(bytes(settings)) if "settings" in met else None


def _check_json(file: SpooledFile, media_type: str) -> None:
    """A body that calls itself JSON and is none would be taken for a table, and answered with what a table lacks."""
    begins = file.head.removeprefix(b"\xef\xbb\xbf").lstrip()[:1]
    if media_type == JSON and begins not in (b"{", b"["):
        raise UnreadableInput("The body is not a JSON object, though the Content-Type says application/json.")

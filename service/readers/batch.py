"""JSON batch -> decoded log: typed decoding straight into columns, then the common checks."""

import re
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import msgspec
import numpy as np

from service.domain.arrays import FloatArray
from service.domain.codes import LogFormat
from service.domain.errors import InputTooLarge, UnreadableInput, WrongValues
from service.domain.glossary import STREAMS
from service.readers.columns import Columns, Complaints, log_from_columns
from service.readers.encoding import UTF8_MARK, UTF16_MARKS
from service.readers.reading import ReadRequest, ReadResult

_Column = list[float | None]

_StreamType = {
    stream: msgspec.defstruct(
        stream,
        [(column, _Column | None | msgspec.UnsetType, msgspec.UNSET) for column in ("time_s", *columns)],
        forbid_unknown_fields=True,
        gc=False,
    )
    for stream, columns in STREAMS.items()
}
_BatchType = msgspec.defstruct(
    "batch",
    [
        ("start_utc", str | None | msgspec.UnsetType, msgspec.UNSET),
        *((stream, kind | None | msgspec.UnsetType, msgspec.UNSET) for stream, kind in _StreamType.items()),
        ("settings", msgspec.Raw | msgspec.UnsetType, msgspec.UNSET),
    ],
    forbid_unknown_fields=True,
)
_BATCH = msgspec.json.Decoder(_BatchType)
_SETTINGS = msgspec.json.Decoder(dict[str, Any] | None)

DEEPEST_SETTINGS = 32
"""Levels of nesting in the settings; the contract's have four."""
LONGEST_ECHO = 100
"""Characters of a client's own name that an error repeats."""

_STRING_OR_NAME = re.compile(rb'"[^"\\]*+(?:\\.[^"\\]*+)*+"(\s*+:)?', re.DOTALL)


def is_batch(head: bytes) -> bool:
    """Whether a file that begins with `head` claims to be JSON."""
    if head.startswith(UTF16_MARKS):
        return head[2:].replace(b"\0", b"").lstrip()[:1] in (b"{", b"[")
    return head.removeprefix(UTF8_MARK).lstrip()[:1] in (b"{", b"[")


def read_batch(path: Path, request: ReadRequest) -> ReadResult:
    """Read a batch of the contract's form.

    Raises
    ------
    UnreadableInput
        No JSON, or not by its standard: a `NaN` token, repeated names, nesting without end, not UTF-8.
    WrongValues
        JSON, but no batch, or its values are wrong.
    InputTooLarge
    """
    body = _body(path, request.limits.batch_bytes)
    request.progress(0.2)
    batch = _decoded(_BATCH, body, "")
    settings = _settings(batch.settings, request.limits.settings_bytes)
    _refuse_repeated_names(body, batch, settings)
    del body
    complaints = Complaints(_pointer, lambda _stream, index: f"index {index}")
    log = log_from_columns(
        LogFormat.BATCH,
        _streams(batch),
        complaints,
        sha256=request.sha256,
        start_utc=_start_utc(batch.start_utc, complaints),
        samples_per_stream=request.limits.samples_per_stream,
    )
    request.progress(1.0)
    return ReadResult(log, settings)


def _body(path: Path, limit: int) -> bytes:
    if path.stat().st_size > limit:
        raise InputTooLarge(f"A JSON batch may have {limit} bytes; send longer flights as CSV or log file.")
    body = path.read_bytes().removeprefix(UTF8_MARK)
    if body.startswith(UTF16_MARKS):
        raise UnreadableInput("JSON must be UTF-8 (RFC 8259); this is UTF-16.")
    return body


def _settings(text: msgspec.Raw | msgspec.UnsetType, limit: int) -> Any:
    if text is msgspec.UNSET:
        return None
    if len(memoryview(text)) > limit:
        raise InputTooLarge(f"The settings of a batch may have {limit} bytes.")
    return _decoded(_SETTINGS, text, "/settings")


def _decoded(decoder: msgspec.json.Decoder[Any], text: bytes | msgspec.Raw, pointer: str) -> Any:
    try:
        return decoder.decode(text)
    except msgspec.ValidationError as error:
        raise _wrong(str(error), pointer) from error
    except (msgspec.DecodeError, UnicodeDecodeError) as error:
        raise UnreadableInput(f"The JSON cannot be read: {error}.") from error
    except (RecursionError, ValueError, OverflowError, MemoryError) as error:
        raise UnreadableInput("The JSON is nested too deep, or its numbers are too long.") from error


def _wrong(message: str, prefix: str) -> WrongValues:
    """msgspec says `Expected ... - at `$.probe.time_s[3]``: the path becomes a JSON Pointer."""
    text, _, path = message.partition(" - at ")
    pointer = prefix + re.sub(r"[.\[]([^.\[\]]+)\]?", r"/\1", path.strip("`$").replace("[...]", ""))
    unknown = re.fullmatch(r"Object contains unknown field `(.*)`", text, re.DOTALL)
    if unknown:
        name = unknown.group(1)[:LONGEST_ECHO]
        pointer += "/" + name.replace("~", "~0").replace("/", "~1")
        text = "This name is not known here"
    return WrongValues(f"The batch is wrong: {pointer or 'the whole'}: {text}.", {pointer: f"{text}."})


def _refuse_repeated_names(body: bytes, batch: Any, settings: object) -> None:
    """The decoder keeps the last of repeated names, so that one column would silently hide another."""
    written = sum(1 for match in _STRING_OR_NAME.finditer(body) if match.group(1))
    streams = [stream for name in STREAMS if isinstance(stream := getattr(batch, name), msgspec.Struct)]
    kept = sum(map(_names_set, (batch, *streams))) + _names_within(settings)
    if written != kept:
        raise UnreadableInput("A name is repeated within a JSON object.")


def _names_set(struct: msgspec.Struct) -> int:
    return sum(getattr(struct, name) is not msgspec.UNSET for name in struct.__struct_fields__)


def _names_within(settings: object) -> int:
    count, level = 0, [settings]
    for _ in range(DEEPEST_SETTINGS):
        objects = [value for value in level if isinstance(value, dict)]
        lists = [value for value in level if isinstance(value, list)]
        count += sum(map(len, objects))
        level = [inner for value in objects for inner in value.values()] + [inner for value in lists for inner in value]
        if not level:
            return count
    raise UnreadableInput(f"The settings are nested more than {DEEPEST_SETTINGS} levels deep.")


def _streams(batch: Any) -> dict[str, Columns]:
    """Streams -> arrays; lists are let go as soon as they are arrays, for they take four times the room."""
    streams: dict[str, Columns] = {}
    for stream, columns in STREAMS.items():
        decoded = getattr(batch, stream)
        if not isinstance(decoded, msgspec.Struct):
            continue
        arrays: dict[str, FloatArray] = {}
        for column in ("time_s", *columns):
            values = getattr(decoded, column)
            if isinstance(values, list):
                arrays[column] = _array(values)
                setattr(decoded, column, None)
            del values
        streams[stream] = arrays
    return streams


def _array(values: list[float | None]) -> FloatArray:
    """None becomes NaN; the common case without any is twice as fast."""
    try:
        return np.fromiter(values, dtype=np.float64, count=len(values))
    except TypeError:
        return np.array(values, dtype=np.float64)


def _pointer(stream: str, column: str) -> str:
    return f"/{stream}/{column}" if column else f"/{stream}"


def _start_utc(text: object, complaints: Complaints) -> datetime | None:
    """RFC 3339; without an offset it is UTC, as the name says."""
    if not isinstance(text, str):
        return None
    try:
        instant = datetime.fromisoformat(text)
        return instant.replace(tzinfo=UTC) if instant.tzinfo is None else instant.astimezone(UTC)
    except (ValueError, OverflowError):
        complaints.add("start_utc", "", "This is no instant such as 2026-05-04T09:12:00Z.")
        return None

"""Dumped representations as JSON bytes: NaN and infinities become null, arrays are written one column at a time."""

from typing import Any

import msgspec
import numpy as np

from service.domain.errors import UnreadableInput


def _plain(value: object) -> object:
    """What the encoder does not know: arrays and numpy's scalars."""
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, np.generic):
        return value.item()
    raise TypeError(f"{type(value).__name__} has no form in JSON")


_encoder = msgspec.json.Encoder(enc_hook=_plain)


def encode(document: Any) -> bytes:
    """JSON of `document` in UTF-8."""
    return _encoder.encode(document)


def decode(data: bytes) -> object:
    """JSON that came from outside; `UnreadableInput` where it is none (a NaN token is none)."""
    try:
        document: object = msgspec.json.decode(data)
    except (msgspec.DecodeError, UnicodeDecodeError, RecursionError) as error:
        raise UnreadableInput(f"This is not JSON: {error}") from error
    return document


def indented(encoded: bytes) -> bytes:
    """The same JSON with line breaks, for people."""
    return msgspec.json.format(encoded, indent=2)

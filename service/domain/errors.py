"""The one error tree.

LoiterwiseError
├── UnreadableInput     the bytes are no log, table or batch that we can decode
├── WrongValues         decoded, but values or their relations are wrong (JSON Pointer -> message)
└── InputTooLarge       a stated limit is passed

A flight that is readable and right, but holds no calibration, is no error: it is a refused verdict.
`service/http/errors.py` maps each class to a status; nothing below it knows HTTP.
"""

from collections.abc import Mapping


class LoiterwiseError(Exception):
    """Base of all that a client can cause."""


class UnreadableInput(LoiterwiseError):
    """The bytes cannot be decoded. The message says what was met and where."""


class WrongValues(LoiterwiseError):
    """Decoded, but wrong. `errors` maps JSON Pointers (or column names, as `/name`) to messages."""

    def __init__(self, detail: str, errors: Mapping[str, str] | None = None) -> None:
        super().__init__(detail)
        self.errors = dict(errors or {})


class InputTooLarge(LoiterwiseError):
    """A limit on bytes, samples or columns is passed; the message names the limit."""

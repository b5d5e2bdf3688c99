"""Failures that only the stores know. What they mean on the wire is decided in `service/http`.

LoiterwiseError
├── StorageUnavailable     the database cannot be used just now; trying again may help
│   └── LogMissing         the log of a flight to add is not in the log store (a sweep took it): store it again
├── NotKept                nothing of that name is kept for this owner
├── VersionConflict        it has been changed by somebody else in the meantime
├── IdempotencyConflict    the same idempotency key came with another request
└── LogGone                the log went by retention

`DatabaseTooNew` stops a start and never reaches a client.
"""

from service.domain.errors import LoiterwiseError


class StorageUnavailable(LoiterwiseError):
    """The cause is chained; the text names no path, host or statement."""


class LogMissing(StorageUnavailable):
    pass


class NotKept(LoiterwiseError):
    """Also for another owner's things and for names that cannot exist."""


class VersionConflict(LoiterwiseError):
    """`found` is the version that there is, None when there is nothing."""

    def __init__(self, detail: str, expected: int, found: int | None) -> None:
        super().__init__(detail)
        self.expected = expected
        self.found = found


class IdempotencyConflict(LoiterwiseError):
    pass


class LogGone(LoiterwiseError):
    pass


class DatabaseTooNew(Exception):
    """A newer version of the service has been at work in this database."""

"""Failures that only HTTP knows.

LoiterwiseError
└── HttpFailure
    ├── BodyCutShort         the body ended before its end
    ├── KeyMissing           no key, or one that is not known
    ├── ScopeMissing         a known key that may not do this
    ├── NotReducedYet        the part will be there once a reduction is done
    ├── PreconditionFailed   `If-Match` or `If-None-Match` does not hold
    ├── MissingPrecondition  a change that needs `If-Match` came without
    ├── NothingAcceptable    `Accept` names nothing that we can write
    ├── UploadTooSlow        the body comes slower than the least rate
    ├── BodyNotSupported     a media type or content coding that we do not read
    ├── TooBusy              no turn within the time to wait
    ├── NoRoom               the folder of uploads cannot be written
    └── QueueFull            too many kept flights wait for their reduction

Each may carry headers that its answer needs.
"""

from collections.abc import Mapping

from service.domain.errors import LoiterwiseError


class HttpFailure(LoiterwiseError):
    def __init__(self, detail: str, headers: Mapping[str, str] | None = None) -> None:
        super().__init__(detail)
        self.headers = dict(headers or {})


class BodyCutShort(HttpFailure):
    pass


class KeyMissing(HttpFailure):
    pass


class ScopeMissing(HttpFailure):
    pass


class NotReducedYet(HttpFailure):
    pass


class PreconditionFailed(HttpFailure):
    pass


class MissingPrecondition(HttpFailure):
    pass


class NothingAcceptable(HttpFailure):
    pass


class UploadTooSlow(HttpFailure):
    pass


class BodyNotSupported(HttpFailure):
    pass


class TooBusy(HttpFailure):
    pass


class NoRoom(HttpFailure):
    pass


class QueueFull(HttpFailure):
    pass

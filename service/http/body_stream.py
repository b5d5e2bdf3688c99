"""The bytes of a request's body as they stream in: counted, limited, paced, and freed of gzip."""

from flask import Request

from service.domain.errors import InputTooLarge, LoiterwiseError
from service.http.failures import BodyCutShort, BodyNotSupported, UploadTooSlow
from service.http.gunzip import ByteSource, Gunzipped
from service.http.pace import Pace


class SentBody:
    """The body as it was sent.

    Raises `InputTooLarge` over the limit, `UploadTooSlow` under the least rate, `BodyCutShort` when the client left.
    """

    def __init__(self, request: Request, limit: int, pace: Pace) -> None:
        self._stated = request.content_length
        self._limit = limit
        if self._stated is not None and self._stated > self._limit:
            raise self._too_large()
        self._stream = request.stream
        self._pace = pace
        self.received = 0

    def read(self, size: int) -> bytes:
        try:
            with self._pace.read(size if self._stated is None else min(size, self._stated - self.received)):
                data = self._stream.read(size)
        except Exception as error:
            # whatever the server raises for a broken body, the cause is the client's side
            raise self._ended_early() from error
        if self._pace.too_slow:
            raise self._ended_early()
        self.received += len(data)
        if self.received > self._limit:
            raise self._too_large()
        if not data and self._stated is not None and self.received < self._stated:
            raise self._ended_early()
        return data

    def _ended_early(self) -> LoiterwiseError:
        if self._pace.too_slow:
            return UploadTooSlow("The upload was slower than this service waits for.")
        return BodyCutShort(f"The body ended after {self.received} bytes, before its end.")

    def _too_large(self) -> InputTooLarge:
        return InputTooLarge(f"The body is larger than the {self._limit} bytes that this service takes.")


def decoded(request: Request, source: ByteSource, limit: int) -> ByteSource:
    """`source` without the request's `Content-Encoding`, up to `limit` bytes; `BodyNotSupported` for any but gzip."""
    coding = request.headers.get("Content-Encoding", "identity").strip().lower()
    if coding in ("", "identity"):
        return source
    if coding in ("gzip", "x-gzip"):
        return Gunzipped(source, limit)
    raise BodyNotSupported("Of content codings only gzip is read.", {"Accept-Encoding": "gzip, identity"})

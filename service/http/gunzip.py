"""The bytes inside gzip, as a stream with an absolute limit: a small body may hold a very large one."""

import zlib
from typing import Protocol

from service.domain.errors import InputTooLarge, UnreadableInput

CHUNK_BYTES = 1024 * 1024
MOST_GZIP_MEMBERS = 4096
GZIP_MAGIC = b"\x1f\x8b"


class ByteSource(Protocol):
    def read(self, size: int) -> bytes:
        """Up to `size` bytes; b"" at the end."""


class Gunzipped:
    """The bytes inside a gzip body of one or more members, up to an absolute limit."""

    def __init__(self, source: ByteSource, limit: int) -> None:
        self._source, self._limit = source, limit
        self._member = _new_member()
        self._members = 1
        self._pending = b""
        self._decoded = 0

    def read(self, size: int) -> bytes:
        while True:
            if self._member.eof and not self._next_member():
                return b""
            data = self._decode(size)
            if data:
                self._decoded += len(data)
                if self._decoded > self._limit:
                    raise InputTooLarge(f"The body decodes to more than the {self._limit} bytes that are taken.")
                return data

    def _decode(self, size: int) -> bytes:
        if not self._pending:
            self._pending = self._source.read(CHUNK_BYTES)
        ended = not self._pending
        try:
            data = self._member.decompress(self._pending, size)
        except zlib.error as error:
            raise UnreadableInput("The bytes are not gzip, or damaged.") from error
        self._pending = self._member.unused_data if self._member.eof else self._member.unconsumed_tail
        if ended and not data and not self._member.eof:
            raise UnreadableInput("The gzip body is cut short.")
        return data

    def _next_member(self) -> bool:
        """Whether another member follows; anything else behind the last one is an error."""
        while len(self._pending) < len(GZIP_MAGIC) and (more := self._source.read(CHUNK_BYTES)):
            self._pending += more
        if not self._pending:
            return False
        if not self._pending.startswith(GZIP_MAGIC):
            raise UnreadableInput("Bytes that are no gzip follow the end of the gzip body.")
        self._members += 1
        if self._members > MOST_GZIP_MEMBERS:
            raise UnreadableInput(f"The gzip body has more than {MOST_GZIP_MEMBERS} members.")
        self._member = _new_member()
        return True


def _new_member() -> "zlib._Decompress":
    return zlib.decompressobj(zlib.MAX_WBITS | 16)

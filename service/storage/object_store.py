"""Blobs in an object store of the S3 kind, under their keys.

An object appears whole when its upload ends; no upload or download holds more than a few parts in memory. What killed
processes left of an upload is not seen among the objects: a rule of the bucket (abort incomplete multipart uploads
after a day) takes it away.
"""

import io
import os
from collections import OrderedDict
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO
from urllib.parse import parse_qsl, urlsplit

import obstore
from obstore.exceptions import BaseError
from obstore.store import S3Store

from service.storage.blobs import (
    PART_BYTES,
    UNAVAILABLE,
    BlobMissing,
    KeptBlob,
    Kind,
    check_content,
    checked_key,
    content_name,
    is_key,
)
from service.storage.errors import StorageUnavailable

if TYPE_CHECKING:
    from _typeshed import WriteableBuffer
    from obstore import GetOptions

SCHEME = "s3"
OPTIONS = ("endpoint", "region")
REGION = "us-east-1"
"""What stores without regions expect."""
CONNECT_TIMEOUT_S = 3
ASKING_TIMEOUT_S = 5
"""Of a request without content: a transaction may wait for its answer."""
CARRYING_TIMEOUT_S = 30
"""Of a request that carries a part of the content."""
RETRIES = 3
RETRYING_S = 10
"""After so long since the first request none is tried again."""
UPLOAD_PART_BYTES = 8 * 1024 * 1024
"""An object has up to 10,000 parts."""
PARTS_AT_ONCE = 2
CACHE_BYTES = 2 * 1024 * 1024
LEAST_CACHED_PARTS = 2

_used_by: int | None = None
"""The process whose threads carry the requests; they do not survive a fork, and a call would wait for ever."""


@dataclass(frozen=True, slots=True)
class Place:
    """Where the objects are. Credentials come from the protocol's usual environment variables, never from the URL."""

    bucket: str
    prefix: str
    endpoint: str | None
    region: str


def place_of(url: str) -> Place:
    """Read `s3://bucket/prefix?endpoint=http://host:port&region=...`; all but the bucket may be left out.

    Raises
    ------
    ValueError : with a text that shows nothing of the URL.
    """
    parts = urlsplit(url)
    pairs = parse_qsl(parts.query, keep_blank_values=True)
    options = dict(pairs)
    if parts.scheme != SCHEME or not parts.netloc:
        raise ValueError("it must be s3://bucket/prefix?endpoint=...&region=...")
    if "@" in parts.netloc or ":" in parts.netloc:
        raise ValueError("credentials belong into the environment, not into the URL")
    if len(options) < len(pairs) or not options.keys() <= set(OPTIONS) or parts.fragment:
        raise ValueError(f"after the question mark only {' and '.join(OPTIONS)} are known, each once")
    endpoint = options.get("endpoint") or None
    if endpoint is not None and urlsplit(endpoint).scheme not in ("http", "https"):
        raise ValueError("the endpoint must begin with http:// or https://")
    region = options.get("region") or os.environ.get("AWS_REGION") or REGION
    return Place(parts.netloc, parts.path.strip("/"), endpoint, region)


class ObjectStore:
    """A bucket, or what stands under a prefix in it."""

    def __init__(self, url: str) -> None:
        place = place_of(url)
        self._asking = _client(place, ASKING_TIMEOUT_S)
        self._carrying = _client(place, CARRYING_TIMEOUT_S)

    def put(self, key: str, finished: Path, sha256: str) -> None:
        size_bytes = check_content(key, finished, sha256)
        if content_name(key) is not None and self.size(key) == size_bytes:
            return
        with writing_failures():
            obstore.put(self._carrying, key, finished, chunk_size=UPLOAD_PART_BYTES, max_concurrency=PARTS_AT_ONCE)

    def open(self, key: str, *, part_bytes: int = PART_BYTES) -> BinaryIO:
        with network_failures():
            found = obstore.head(self._asking, checked_key(key))

        def fetch(start: int, end: int) -> bytes:
            options: GetOptions = {"range": (start, end)}
            if found["e_tag"] is not None:
                # an object that was replaced since is another one
                options["if_match"] = found["e_tag"]
            with network_failures():
                return bytes(obstore.get(self._carrying, key, options=options).bytes())

        return io.BufferedReader(_PartStream(fetch, found["size"], part_bytes))

    def size(self, key: str) -> int | None:
        try:
            with network_failures():
                return int(obstore.head(self._asking, checked_key(key))["size"])
        except BlobMissing:
            return None

    def delete(self, key: str) -> None:
        with writing_failures():
            obstore.delete(self._asking, checked_key(key))

    def list(self, kind: Kind) -> Iterator[KeptBlob]:
        with network_failures():
            for page in obstore.list(self._asking, prefix=kind):
                for found in page:
                    if is_key(found["path"]):
                        yield KeptBlob(found["path"], found["size"], _age_s(found["last_modified"]))

    def discard_unfinished(self, older_than_s: float) -> int:  # noqa: ARG002 - they are not to be seen here
        return 0

    def local_path(self, key: str) -> Path | None:
        checked_key(key)
        return None

    def check_usable(self) -> None:
        with network_failures():
            next(iter(obstore.list(self._asking, prefix="logs")), None)


def _client(place: Place, timeout_s: float) -> S3Store:
    return S3Store(
        place.bucket,
        prefix=place.prefix or None,
        # without one, that of the environment
        config={} if place.endpoint is None else {"endpoint": place.endpoint},
        region=place.region,
        client_options={
            "allow_http": (place.endpoint or "").startswith("http://"),
            "connect_timeout": timedelta(seconds=CONNECT_TIMEOUT_S),
            "timeout": timedelta(seconds=timeout_s),
        },
        retry_config={"max_retries": RETRIES, "retry_timeout": timedelta(seconds=RETRYING_S)},
    )


@contextmanager
def network_failures() -> Iterator[None]:
    """Turn the library's errors into the store's."""
    _check_process()
    try:
        yield
    except FileNotFoundError as error:
        raise BlobMissing from error
    except (BaseError, OSError) as error:
        raise StorageUnavailable(UNAVAILABLE) from error


@contextmanager
def writing_failures() -> Iterator[None]:
    """The same for what needs no object to be there: if something is missing, it is the bucket."""
    try:
        with network_failures():
            yield
    except BlobMissing as error:
        raise StorageUnavailable(UNAVAILABLE) from error.__cause__


def _check_process() -> None:
    global _used_by
    if _used_by is None:
        _used_by = os.getpid()
    if _used_by != os.getpid():
        raise RuntimeError("the object store was used before this process forked")


class _PartStream(io.RawIOBase):
    """Reads an object by parts of equal size and holds the ones used last."""

    def __init__(self, fetch: Callable[[int, int], bytes], size_bytes: int, part_bytes: int) -> None:
        super().__init__()
        self._fetch = fetch
        self._size = size_bytes
        self._part_bytes = part_bytes
        self._position = 0
        self._held: OrderedDict[int, bytes] = OrderedDict()
        self._most_held = max(CACHE_BYTES // part_bytes, LEAST_CACHED_PARTS)

    def readable(self) -> bool:
        return True

    def seekable(self) -> bool:
        return True

    def seek(self, offset: int, whence: int = os.SEEK_SET, /) -> int:
        base = {os.SEEK_SET: 0, os.SEEK_CUR: self._position, os.SEEK_END: self._size}[whence]
        if base + offset < 0:
            raise ValueError("a position before the beginning")
        self._position = base + offset
        return self._position

    def tell(self) -> int:
        return self._position

    def readinto(self, buffer: "WriteableBuffer", /) -> int:
        if self._position >= self._size:
            return 0
        number, start = divmod(self._position, self._part_bytes)
        view = memoryview(buffer).cast("B")
        piece = memoryview(self._part(number))[start : start + len(view)]
        view[: len(piece)] = piece
        self._position += len(piece)
        return len(piece)

    def _part(self, number: int) -> bytes:
        if number not in self._held:
            start = number * self._part_bytes
            end = min(start + self._part_bytes, self._size)
            part = self._fetch(start, end)
            if len(part) != end - start:
                raise StorageUnavailable(UNAVAILABLE)
            self._held[number] = part
            if len(self._held) > self._most_held:
                self._held.popitem(last=False)
        self._held.move_to_end(number)
        return self._held[number]


def _age_s(modified_utc: datetime) -> float:
    return max((datetime.now(UTC) - modified_utc).total_seconds(), 0.0)

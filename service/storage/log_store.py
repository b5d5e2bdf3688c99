"""The logs as they came, by the SHA-256 of their content; and which store a location means."""

import hashlib
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO, Final

from service.storage.blobs import PART_BYTES, BlobDamaged, BlobStore
from service.storage.local_store import LocalStore, machine_failures, open_kept

SCRATCH_PREFIX = "loiterwise-log-"
LOGS: Final = "logs"


def open_store(location: str | Path) -> BlobStore:
    """The store at a folder or at an `s3://` URL. Nothing is reached before it is used.

    Raises
    ------
    ValueError : a URL that is not known; the text shows nothing of it.
    """
    if isinstance(location, str) and "://" in location:
        # loaded only where it is used: it brings a network client
        from service.storage.object_store import ObjectStore

        return ObjectStore(location)
    return LocalStore(Path(location))


def log_key(sha256: str) -> str:
    return f"{LOGS}/{sha256}"


@dataclass(frozen=True, slots=True)
class KeptLogFile:
    sha256: str
    size_bytes: int
    age_s: float
    """Since it was put last."""


class LogStore:
    """Logs in a blob store. Every call may raise StorageUnavailable, the reading ones BlobMissing."""

    def __init__(self, blobs: BlobStore) -> None:
        self._blobs = blobs

    def put(self, finished: Path, sha256: str) -> None:
        """Keep the content of a file; the file stays the caller's. Returns when it is safe against loss of power."""
        self._blobs.put(log_key(sha256), finished, sha256)

    def open(self, sha256: str) -> BinaryIO:
        """A seekable stream of the log, fetched in parts."""
        return self._blobs.open(log_key(sha256))

    def size(self, sha256: str) -> int | None:
        """In bytes; None if it is not kept."""
        return self._blobs.size(log_key(sha256))

    def delete(self, sha256: str) -> None:
        self._blobs.delete(log_key(sha256))

    def list(self) -> Iterator[KeptLogFile]:
        """All logs, with or without a flight."""
        for blob in self._blobs.list(LOGS):
            yield KeptLogFile(blob.key.rpartition("/")[2], blob.size_bytes, blob.age_s)

    @contextmanager
    def file(self, sha256: str, scratch: Path) -> Iterator[Path]:
        """The log as a file, only for reading: the kept one, or a copy in the folder `scratch` that goes at the end.

        Raises
        ------
        BlobDamaged : the content is no longer what was put.
        """
        own = self._blobs.local_path(log_key(sha256))
        if own is not None:
            _check_content(sha256, own)
            yield own
            return
        with _scratch_file(scratch) as copy:
            self._fetch(sha256, copy)
            _check_content(sha256, copy)
            yield copy

    def _fetch(self, sha256: str, copy: Path) -> None:
        with self.open(sha256) as kept, machine_failures(), copy.open("wb") as file:
            shutil.copyfileobj(kept, file, PART_BYTES)


def open_log_store(location: str | Path) -> LogStore:
    """The logs at a location. Raises as `open_store` does."""
    return LogStore(open_store(location))


def _check_content(sha256: str, path: Path) -> None:
    with open_kept(path) as file:
        if hashlib.file_digest(file, "sha256").hexdigest() != sha256:
            raise BlobDamaged("The log is damaged: it is no longer what was uploaded.")


@contextmanager
def _scratch_file(folder: Path) -> Iterator[Path]:
    """An empty file that is deleted in any case."""
    with machine_failures():
        number, name = tempfile.mkstemp(prefix=SCRATCH_PREFIX, dir=folder)
        os.close(number)
    try:
        yield Path(name)
    finally:
        with suppress(OSError):
            Path(name).unlink()

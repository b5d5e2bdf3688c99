"""Uploads rest in a file while they are reduced; the file is gone when the request ends."""

import hashlib
import os
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import BinaryIO

from service.http.failures import NoRoom

PREFIX = "loiterwise-upload-"
STALE_S = 24 * 3600.0
HEAD_BYTES = 64


class SpooledFile:
    """A file being written; knows its SHA-256, its size and its first bytes without reading it again."""

    def __init__(self, file: BinaryIO, path: Path) -> None:
        self._file = file
        self._hash = hashlib.sha256()
        self.path = path
        self.size = 0
        self.head = b""

    def write(self, data: bytes) -> None:
        try:
            self._file.write(data)
        except OSError as error:
            raise _no_room() from error
        self._hash.update(data)
        self.size += len(data)
        if len(self.head) < HEAD_BYTES:
            self.head = (self.head + data)[:HEAD_BYTES]

    def finish(self) -> None:
        """All is written: let readers see it."""
        try:
            self._file.flush()
        except OSError as error:
            raise _no_room() from error

    @property
    def sha256(self) -> str:
        return self._hash.hexdigest()


@contextmanager
def spooled_file(folder: Path) -> Iterator[SpooledFile]:
    """A new file in `folder` that is deleted in any case; `NoRoom` when it cannot be made or written."""
    try:
        folder.mkdir(parents=True, exist_ok=True, mode=0o700)
        number, name = tempfile.mkstemp(prefix=PREFIX, dir=folder)
    except OSError as error:
        raise _no_room() from error
    path = Path(name)
    # bytes are written in large pieces, so a buffer would only copy them
    file = os.fdopen(number, "wb", buffering=0)
    try:
        yield SpooledFile(file, path)
    finally:
        with suppress(OSError):
            path.unlink()
        with suppress(OSError):
            file.close()


def check_writable(folder: Path) -> None:
    """Raise `NoRoom` unless a file can be made, written and deleted in `folder`."""
    with spooled_file(folder) as file:
        file.write(b"ready?")
        file.finish()


def sweep(folder: Path) -> int:
    """Delete what a killed process left behind a day ago or earlier; returns how many files."""
    swept = 0
    with suppress(OSError):
        for path in folder.glob(PREFIX + "*"):
            with suppress(OSError):
                if time.time() - path.stat().st_mtime > STALE_S:
                    path.unlink()
                    swept += 1
    return swept


def _no_room() -> NoRoom:
    return NoRoom("The upload cannot be stored just now.", {"Retry-After": "30"})

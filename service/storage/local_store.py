"""Blobs in a folder: `logs/ab/abcd...` and `series/yz/<flight>.<number>[.<fence>]`.

A blob gets its content under a temporary name beside its place, then its name by one `rename`, each made safe on the
disk before the next step. Killed anywhere, that leaves nothing, or a temporary name for the sweep, or the whole blob.
"""

import errno
import io
import os
import secrets
import shutil
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO

from service.storage.blobs import (
    KINDS,
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

UNFINISHED = ".unfinished-"
"""Begins the temporary names."""
FOLDER_MODE = 0o700
READ_AHEAD_BYTES = 128 * 1024
NAME_JOINT = "."
NO_LINKS = frozenset({errno.EXDEV, errno.EPERM, errno.EACCES, errno.EMLINK, errno.ENOTSUP, errno.ENOSYS, errno.EINVAL})
"""Why a file may have no second name there: another file system, or one that knows no links."""


class LocalStore:
    """A folder of this machine, or one that several machines mount."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder

    def put(self, key: str, finished: Path, sha256: str) -> None:
        size_bytes = check_content(key, finished, sha256)
        path = self._path(key)
        with machine_failures():
            folders = (self._folder, path.parent.parent, path.parent)
            for folder in folders:
                folder.mkdir(parents=True, exist_ok=True, mode=FOLDER_MODE)
            if not _kept_already(key, path, size_bytes):
                _write_whole(finished, path)
            # also for a blob that another has just renamed: it may not have come to this step yet
            for folder in reversed(folders):
                _sync_folder(folder)

    def open(self, key: str, *, part_bytes: int = PART_BYTES) -> BinaryIO:
        return open_kept(self._path(key), min(part_bytes, READ_AHEAD_BYTES))

    def size(self, key: str) -> int | None:
        try:
            with reading_failures():
                return self._path(key).stat().st_size
        except BlobMissing:
            return None

    def delete(self, key: str) -> None:
        with machine_failures():
            self._path(key).unlink(missing_ok=True)

    def list(self, kind: Kind) -> Iterator[KeptBlob]:
        for entry in self._entries(kind):
            key = f"{kind}/{entry.name.replace(NAME_JOINT, '/')}"
            found = _stat(entry) if is_key(key) else None
            if found is not None:
                yield KeptBlob(key, found.st_size, _age_s(found))

    def discard_unfinished(self, older_than_s: float) -> int:
        discarded = 0
        for entry in (entry for kind in KINDS for entry in self._entries(kind) if entry.name.startswith(UNFINISHED)):
            found = _stat(entry)
            if found is not None and _age_s(found) > older_than_s:
                with machine_failures():
                    Path(entry.path).unlink(missing_ok=True)
                discarded += 1
        return discarded

    def local_path(self, key: str) -> Path | None:
        return self._path(key)

    def check_usable(self) -> None:
        with machine_failures():
            self._folder.mkdir(parents=True, exist_ok=True, mode=FOLDER_MODE)
            with _temporary_name(self._folder) as path:
                path.write_bytes(b"usable?")

    def _path(self, key: str) -> Path:
        kind, _, name = checked_key(key).partition("/")
        name = name.replace("/", NAME_JOINT)
        # a flight's name begins with its time and ends by chance, so its end spreads the files
        letters = name[:2] if content_name(key) else name.partition(NAME_JOINT)[0][-2:]
        return self._folder / kind / letters / name

    def _entries(self, kind: Kind) -> Iterator[os.DirEntry[str]]:
        """Every file in the folders of a kind."""
        for folder in _scanned(self._folder / kind):
            if folder.is_dir(follow_symlinks=False):
                yield from (entry for entry in _scanned(Path(folder.path)) if entry.is_file(follow_symlinks=False))


@contextmanager
def machine_failures() -> Iterator[None]:
    """Turn what the machine refuses into the store's error."""
    try:
        yield
    except OSError as error:
        raise StorageUnavailable(UNAVAILABLE) from error


@contextmanager
def reading_failures() -> Iterator[None]:
    """The same, where a file that is not there is a blob that is missing."""
    with machine_failures():
        try:
            yield
        except FileNotFoundError as error:
            raise BlobMissing from error


def open_kept(path: Path, read_ahead_bytes: int = READ_AHEAD_BYTES) -> io.BufferedReader:
    """A file of a store for reading. Raises BlobMissing, StorageUnavailable; its reads raise StorageUnavailable."""
    with reading_failures():
        return io.BufferedReader(_KeptFile(path), read_ahead_bytes)


class _KeptFile(io.FileIO):
    def readinto(self, buffer: "WriteableBuffer", /) -> int | None:
        with machine_failures():
            return super().readinto(buffer)

    def readall(self) -> bytes:
        with machine_failures():
            return super().readall()


def _kept_already(key: str, path: Path, size_bytes: int) -> bool:
    """Is the same content there? It then counts as put now. A file cut short, by whatever, is not the same."""
    if content_name(key) is None:
        return False
    with suppress(FileNotFoundError):
        if path.stat().st_size == size_bytes:
            os.utime(path)
            return True
    return False


def _write_whole(finished: Path, path: Path) -> None:
    with _temporary_name(path.parent) as temporary:
        _link_or_copy(finished, temporary)
        with temporary.open("rb") as file:
            os.fsync(file.fileno())
        temporary.replace(path)


@contextmanager
def _temporary_name(folder: Path) -> Iterator[Path]:
    """A name in `folder` that nobody else has; whatever is under it at the end is deleted."""
    path = folder / f"{UNFINISHED}{os.getpid()}-{secrets.token_hex(8)}"
    try:
        yield path
    finally:
        with suppress(OSError):
            path.unlink(missing_ok=True)


def _link_or_copy(source: Path, target: Path) -> None:
    """Put the content of `source` at `target` too: as a second name of the same file where that can be, else a copy."""
    try:
        os.link(source, target)
        # its age counts from now
        os.utime(target)
    except OSError as error:
        if error.errno not in NO_LINKS:
            raise
        shutil.copyfile(source, target)


def _sync_folder(folder: Path) -> None:
    """Make the names in a folder safe against loss of power."""
    number = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(number)
    finally:
        os.close(number)


def _scanned(folder: Path) -> Iterator[os.DirEntry[str]]:
    """The entries of a folder; none if it is not there."""
    try:
        with reading_failures(), os.scandir(folder) as entries:
            yield from entries
    except BlobMissing:
        return


def _stat(entry: os.DirEntry[str]) -> os.stat_result | None:
    """None for a file that went meanwhile."""
    try:
        with reading_failures():
            return entry.stat(follow_symlinks=False)
    except BlobMissing:
        return None


def _age_s(found: os.stat_result) -> float:
    return max(time.time() - found.st_mtime, 0.0)

"""Files that are kept whole under a key: in a folder of this machine or in an object store.

A key is `logs/<sha256 of the content>` or `series/<flight>/<number>[/<fence>]`. A blob is there whole or not at all,
whatever is killed while it is put. One named by its content is kept as it is when it is put again; any other is
replaced at once.
"""

import hashlib
import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO, Final, Literal, Protocol

from service.storage.errors import StorageUnavailable

Kind = Literal["logs", "series"]
KINDS: Final[tuple[Kind, ...]] = ("logs", "series")

PART_BYTES = 4 * 1024 * 1024
"""How much of a blob is held or asked for at a time."""
UNAVAILABLE = "What is kept cannot be reached just now; try again."

_KEY = re.compile(r"logs/[0-9a-f]{64}|series/[0-9A-Za-z]+/[0-9]+(/[0-9]+)?")
_SHA256 = re.compile(r"[0-9a-f]{64}")


class BlobMissing(StorageUnavailable):
    """Nothing is kept under the key."""

    def __init__(self) -> None:
        super().__init__("A file that should be kept is not there.")


class BlobDamaged(StorageUnavailable):
    """What is kept is not what was put."""


@dataclass(frozen=True, slots=True)
class KeptBlob:
    key: str
    size_bytes: int
    age_s: float
    """Since it was put last; by the store's clock against ours, so a minute more or less says nothing."""


class BlobStore(Protocol):
    """A store belongs to one process: use it first after a fork. Its threads may share it.

    Every call may raise StorageUnavailable: no room, read-only, not to be reached in time.
    """

    def put(self, key: str, finished: Path, sha256: str) -> None:
        """Keep the content of a file that nobody writes any more, safe against loss of power; the file stays.

        Raises
        ------
        StorageUnavailable : also when the content has another SHA-256.
        """

    def open(self, key: str, *, part_bytes: int = PART_BYTES) -> BinaryIO:
        """A seekable stream that fetches no more than `part_bytes` at a time. Raises BlobMissing."""

    def size(self, key: str) -> int | None:
        """In bytes; None if there is nothing."""

    def delete(self, key: str) -> None:
        """Nothing is there afterwards, nor need it be before."""

    def list(self, kind: Kind) -> Iterator[KeptBlob]:
        """All blobs of a kind, in any order; those put or deleted meanwhile may be in it or not."""

    def discard_unfinished(self, older_than_s: float) -> int:
        """Delete what killed processes left half put; how many files."""

    def local_path(self, key: str) -> Path | None:
        """Where the blob is, or would be, as a file of this machine; None where it never is one. Only for reading."""

    def check_usable(self) -> None:
        """Can the store be used just now?"""


def checked_key(key: str) -> str:
    """`key` itself. What has another form comes from a mistake of ours: ValueError."""
    if _KEY.fullmatch(key) is None:
        raise ValueError("that is no key of a blob")
    return key


def is_key(text: str) -> bool:
    return _KEY.fullmatch(text) is not None


def content_name(key: str) -> str | None:
    """The SHA-256 of the content that `key` names; None for one that names a place."""
    name = key.rpartition("/")[2]
    return name if _SHA256.fullmatch(name) else None


def check_content(key: str, finished: Path, sha256: str) -> int:
    """Size of the file to put, in bytes.

    Raises
    ------
    StorageUnavailable : the content is not what `sha256` says, as when the disk was full.
    ValueError : the key names another content.
    """
    if content_name(checked_key(key)) not in (None, sha256):
        raise ValueError("the key names another content")
    try:
        with finished.open("rb") as file:
            found = hashlib.file_digest(file, "sha256").hexdigest()
            size_bytes = file.tell()
    except OSError as error:
        raise StorageUnavailable(UNAVAILABLE) from error
    if found != sha256:
        raise StorageUnavailable("The upload changed on its way to the store; try again.")
    return size_bytes

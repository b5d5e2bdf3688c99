"""The corrected airspeeds and stall margins of a reduction, kept compactly beside the logs and read in part."""

import hashlib
import tempfile
from collections.abc import Collection, Iterator
from pathlib import Path
from typing import Final

from service.domain.results import Reduction
from service.storage.blobs import BlobStore, KeptBlob
from service.storage.local_store import machine_failures, reading_failures
from service.storage.series_file import Group, SeriesAbsent, SeriesPart, file_of, read_part

__all__ = ["Group", "SeriesAbsent", "SeriesPart", "SeriesStore", "read_series", "series_key", "write_series"]

SERIES: Final = "series"
SCRATCH_PREFIX = "loiterwise-series-"
RANGE_BYTES = 64 * 1024
"""Of an object asked for at a time: a chunk of a column takes up to half of it."""


def series_key(flight_id: str, number: int, fence: int | None = None) -> str:
    """Of one reduction of a flight.

    With the fence of the attempt that writes it, no other attempt writes the same key: neither a late one over what has
    been acknowledged, nor a new one where a sweep is just deleting what an earlier one left.
    """
    return f"{SERIES}/{flight_id}/{number}" + ("" if fence is None else f"/{fence}")


def write_series(blobs: BlobStore, key: str, reduction: Reduction, *, scratch: Path | None = None) -> int:
    """Keep the series of a reduction under `key`, in place of what was there; bytes taken.

    `scratch` is the folder for the file while it is written (the system's without).

    Raises
    ------
    StorageUnavailable
    """
    content = file_of(reduction)
    with machine_failures(), tempfile.NamedTemporaryFile(prefix=SCRATCH_PREFIX, dir=scratch) as file:
        file.write(content)
        file.flush()
        blobs.put(key, Path(file.name), hashlib.sha256(content).hexdigest())
    return len(content)


def read_series(
    blobs: BlobStore,
    key: str,
    group: Group,
    from_s: float | None = None,
    to_s: float | None = None,
    columns: Collection[str] | None = None,
) -> SeriesPart | SeriesAbsent:
    """Samples with `from_s` <= time <= `to_s` [s, the log's axis] of `columns` (all without), and their flags.

    Raises
    ------
    BlobMissing, BlobDamaged, StorageUnavailable
    WrongValues : a column is not known.
    """
    path = blobs.local_path(key)
    if path is not None:
        with reading_failures():
            return read_part(path, group, from_s, to_s, columns)
    with blobs.open(key, part_bytes=RANGE_BYTES) as file:
        return read_part(file, group, from_s, to_s, columns)


class SeriesStore:
    """`write_series` and `read_series` on one store."""

    def __init__(self, blobs: BlobStore, scratch: Path | None = None) -> None:
        self._blobs = blobs
        self._scratch = scratch

    def write(self, key: str, reduction: Reduction) -> int:
        return write_series(self._blobs, key, reduction, scratch=self._scratch)

    def read(
        self,
        key: str,
        group: Group,
        from_s: float | None = None,
        to_s: float | None = None,
        columns: Collection[str] | None = None,
    ) -> SeriesPart | SeriesAbsent:
        return read_series(self._blobs, key, group, from_s, to_s, columns)

    def delete(self, key: str) -> None:
        self._blobs.delete(key)

    def list(self) -> Iterator[KeptBlob]:
        """All series, with or without a reduction."""
        return self._blobs.list(SERIES)

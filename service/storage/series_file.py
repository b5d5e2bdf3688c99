"""The file of one reduction's series: HDF5, one group per series, one compressed column per dataset.

Columns stand in chunks of `CHUNK_SAMPLES`, and `chunk_start_s` holds the first time of each, so that a part is read
without its neighbours. Numbers keep the six decimals that answers show, as whole millionths; times keep every digit.
A damaged byte is noticed: in the structure by the checksums of HDF5 1.10, in a column by the one of its compression.
"""

from collections.abc import Collection, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import fields
from typing import Any, Final, Literal, NamedTuple

import h5py
import numpy as np
import numpy.typing as npt

from service.domain.arrays import FlagArray, FloatArray
from service.domain.codes import Reason
from service.domain.errors import WrongValues
from service.domain.results import CorrectedSeries, Reduction, StallMargins
from service.storage.blobs import BlobDamaged
from service.storage.errors import StorageUnavailable

Group = Literal["airspeed", "stall_margins"]

LAYOUT: Final = 1
"""Of the file; another number is one that we cannot read."""
HDF5_VERSIONS: Final = ("v110", "v110")
CHUNK_SAMPLES: Final = 8192
"""13 minutes at 10 Hz."""
GZIP_LEVEL: Final = 4
MILLIONTHS: Final = 1e6
MISSING: Final = np.iinfo(np.int32).min
"""Stands for NaN among whole millionths."""
LARGEST: Final = np.iinfo(np.int32).max / MILLIONTHS
MOST_SAMPLES: Final = 50_000_000
"""Ten times the most that a log may have: more is damage."""

TIME: Final = "time_s"
FLAGS: Final = "flags"
CHUNK_START: Final = "chunk_start_s"
ABSENT: Final = "absent"


class SeriesPart(NamedTuple):
    """A stretch of a series, its columns and flags of equal length."""

    columns: Mapping[str, FloatArray]
    flags: FlagArray


class SeriesAbsent(NamedTuple):
    """The reduction has no such series."""

    reason: str
    """In words."""


def _number_columns(record: type[CorrectedSeries] | type[StallMargins]) -> tuple[str, ...]:
    arrays = (field.name for field in fields(record) if field.type == FloatArray)
    return tuple(name for name in arrays if name != TIME)


COLUMNS: Final[Mapping[Group, tuple[str, ...]]] = {
    "airspeed": (TIME, *_number_columns(CorrectedSeries)),
    "stall_margins": (TIME, *_number_columns(StallMargins)),
}
"""Group -> its columns of numbers; each group has flags besides."""


def file_of(reduction: Reduction) -> bytes:
    """A file with both series of a reduction.

    It is built in memory, where it takes what it will take on the disk: HDF5 ends the process when it cannot write.
    """
    with h5py.File("series", "w", driver="core", backing_store=False, libver=HDF5_VERSIONS) as root:
        root.attrs["layout"] = LAYOUT
        _write_series(root, "airspeed", reduction.airspeed, _no_airspeed(reduction))
        _write_series(root, "stall_margins", reduction.stall_margins, reduction.stall_margins_absent)
        root.flush()
        return bytes(root.id.get_file_image())


def _no_airspeed(reduction: Reduction) -> str:
    reasons = (reason.message for reason in reduction.calibration.reasons if reason.code == Reason.NO_PROBE)
    return next(reasons, "There is no probe in this log.")


def _write_series(
    root: h5py.File, name: Group, series: CorrectedSeries | StallMargins | None, absent: str | None
) -> None:
    group = root.create_group(name)
    if series is None:
        group.attrs[ABSENT] = absent or "It was not made."
        return
    if np.any(np.diff(series.time_s) < 0):
        raise ValueError("times that go back cannot be searched")
    _write_column(group, CHUNK_START, series.time_s[::CHUNK_SAMPLES])
    _write_time(root, group, series.time_s)
    for column in COLUMNS[name][1:]:
        _write_column(group, column, _compact(getattr(series, column)))
    _write_column(group, FLAGS, series.flags.astype(np.uint32))


def _write_time(root: h5py.File, group: h5py.Group, time_s: FloatArray) -> None:
    """Margins have the times of the airspeeds: they stand in the file once."""
    first = root["airspeed"].get(TIME)
    if first is not None and np.array_equal(first[:], time_s):
        group[TIME] = first
    else:
        _write_column(group, TIME, time_s)


def _write_column(group: h5py.Group, name: str, values: npt.NDArray[Any]) -> None:
    if values.size == 0:
        group.create_dataset(name, data=values)
        return
    chunks = (min(CHUNK_SAMPLES, values.size),)
    group.create_dataset(
        name, data=values, chunks=chunks, shuffle=True, compression="gzip", compression_opts=GZIP_LEVEL
    )


def _compact(values: FloatArray) -> npt.NDArray[Any]:
    """Whole millionths as int32, or the numbers themselves where one is too large for that."""
    if not np.all(np.isnan(values) | (np.abs(values) <= LARGEST)):
        return values.astype(np.float64)
    return np.where(np.isnan(values), MISSING, np.rint(values * MILLIONTHS)).astype(np.int32)


def _expanded(values: npt.NDArray[Any]) -> FloatArray:
    if values.dtype == np.float64:
        return values
    return np.where(values == MISSING, np.nan, values / MILLIONTHS)


def read_part(
    file: Any, group: Group, from_s: float | None, to_s: float | None, columns: Collection[str] | None
) -> SeriesPart | SeriesAbsent:
    """Samples with `from_s` <= time <= `to_s` of the columns asked for, all without; flags always.

    `file` is a path or a seekable stream; of a stream only what is needed is read.

    Raises
    ------
    BlobDamaged
    WrongValues : a column is not known.
    """
    wanted = _checked_columns(group, columns)
    with _damage_told(), h5py.File(file, "r", locking=False) as root:
        if root.attrs["layout"] != LAYOUT:
            raise BlobDamaged("The series are kept in a form that this version does not know.")
        found = _hard(root, group, h5py.Group)
        if ABSENT in found.attrs:
            return SeriesAbsent(str(found.attrs[ABSENT]))
        return _read_series(found, from_s, to_s, wanted)


def _checked_columns(group: Group, columns: Collection[str] | None) -> tuple[str, ...]:
    if columns is None:
        return COLUMNS[group]
    unknown = sorted(set(columns) - set(COLUMNS[group]))
    if unknown:
        raise WrongValues("There is no such column.", {"/columns": f"{unknown[0]!r} is none of {group}"})
    return tuple(columns)


@contextmanager
def _damage_told() -> Iterator[None]:
    """A library's complaint about the content means damage; the store's own errors and the machine's stay."""
    try:
        yield
    except StorageUnavailable:
        raise
    except (OSError, RuntimeError, ValueError, LookupError, TypeError, AttributeError, MemoryError) as error:
        if isinstance(error, OSError) and error.errno is not None:
            raise
        raise BlobDamaged("The series of this flight are damaged; reduce it again.") from error


def _read_series(group: h5py.Group, from_s: float | None, to_s: float | None, names: tuple[str, ...]) -> SeriesPart:
    time = _column(group, TIME, np.float64)
    sample_count = len(time)
    first, end = _samples_between(group, time, from_s, to_s)

    def part(name: str, *kinds: type[np.generic]) -> npt.NDArray[Any]:
        column = _column(group, name, *kinds)
        if len(column) != sample_count:
            raise ValueError("columns of unequal length")
        values: npt.NDArray[Any] = column[first:end]
        return values

    numbers = {name: _expanded(part(name, np.float64, np.int32)) for name in names}
    return SeriesPart(numbers, part(FLAGS, np.uint32))


def _samples_between(
    group: h5py.Group, time: h5py.Dataset, from_s: float | None, to_s: float | None
) -> tuple[int, int]:
    """First sample, and the one after the last. Only the chunks at the two ends are read."""
    starts: FloatArray = _column(group, CHUNK_START, np.float64)[:]
    if len(starts) != -(-len(time) // CHUNK_SAMPLES):
        raise ValueError("an index of another series")
    # a chunk may begin with the time that its predecessor ends with
    first = 0 if from_s is None else _found_in(time, _chunk_of(starts, from_s, "left"), from_s, "left")
    end = len(time) if to_s is None else _found_in(time, _chunk_of(starts, to_s, "right"), to_s, "right")
    return first, end


def _chunk_of(starts: FloatArray, time_s: float, side: Literal["left", "right"]) -> int:
    return max(int(np.searchsorted(starts, time_s, side)) - 1, 0)


def _found_in(time: h5py.Dataset, chunk: int, time_s: float, side: Literal["left", "right"]) -> int:
    start = chunk * CHUNK_SAMPLES
    return start + int(np.searchsorted(time[start : start + CHUNK_SAMPLES], time_s, side))


def _column(group: h5py.Group, name: str, *kinds: type[np.generic]) -> h5py.Dataset:
    """A dataset of one dimension in this very file. What is said of it must be right before it is read."""
    dataset = _hard(group, name, h5py.Dataset)
    if dataset.dtype not in [np.dtype(kind) for kind in kinds] or dataset.ndim != 1:
        raise TypeError("another kind of column")
    if dataset.external is not None or dataset.is_virtual or len(dataset) > MOST_SAMPLES:
        raise ValueError("a column that is not one of ours")
    return dataset


def _hard(group: h5py.Group, name: str, kind: type[h5py.HLObject]) -> Any:
    """A member that stands in this file, not one that points into others."""
    if not isinstance(group.get(name, getlink=True), h5py.HardLink):
        raise TypeError("a link")
    member = group[name]
    if not isinstance(member, kind):
        raise TypeError("another kind of member")
    return member

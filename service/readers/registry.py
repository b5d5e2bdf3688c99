"""The one door to all readers: a file of any format -> decoded log.

A new format is a module with `is_x(head)` and `read_x(path, request)`, and a line in :data:`READERS`.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

from service.domain.codes import LogFormat
from service.domain.errors import UnreadableInput
from service.domain.settings import ColumnMeaning
from service.readers.batch import is_batch, read_batch
from service.readers.limits import DEFAULT_LIMITS, ReadingLimits
from service.readers.reading import Progress, ReadRequest, ReadResult, no_progress
from service.readers.table import is_table, read_table
from service.readers.ulog import is_ulog, read_ulog

HEAD_BYTES = 4096
"""What a reader sees of a file to tell whether it is for it."""


@dataclass(frozen=True, slots=True)
class Reader:
    is_for: Callable[[bytes], bool]
    """Whether a file that begins so is of this format; cheap, never raises."""
    read: Callable[[Path, ReadRequest], ReadResult]


READERS: Mapping[LogFormat, Reader] = {
    LogFormat.ULOG: Reader(is_ulog, read_ulog),
    LogFormat.BATCH: Reader(is_batch, read_batch),
    LogFormat.CSV: Reader(is_table, read_table),
}
"""In the order in which they are asked."""


def sniff(head: bytes) -> LogFormat:
    """Format of a file that begins with `head`: by its content alone.

    Raises
    ------
    UnreadableInput
        None of ours.
    """
    if not head:
        raise UnreadableInput("The body is empty.")
    for log_format, reader in READERS.items():
        if reader.is_for(head):
            return log_format
    raise UnreadableInput("This is no log: neither a ULog, nor JSON, nor a table of text.")


def read_log(
    path: Path,
    *,
    sha256: str,
    columns: Mapping[str, ColumnMeaning] | None = None,
    progress: Progress | None = None,
    limits: ReadingLimits = DEFAULT_LIMITS,
) -> ReadResult:
    """Read a log of any format.

    Parameters
    ----------
    sha256 : of the file, for the record.
    columns : foreign column names of a CSV -> what they hold; other formats have no use for it.
    progress : called now and then with the share read, 0 to 1.

    Returns
    -------
    ReadResult
        The log, and the settings that a batch brought along (raw, not validated; None for other formats).

    Raises
    ------
    UnreadableInput, WrongValues, InputTooLarge
    """
    with path.open("rb") as file:
        head = file.read(HEAD_BYTES)
    request = ReadRequest(sha256, columns or {}, progress or no_progress, limits)
    return READERS[sniff(head)].read(path, request)

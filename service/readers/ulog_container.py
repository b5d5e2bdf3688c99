"""The container of a ULog file, through pyulog, made safe against hostile and damaged files.

pyulog keeps every message, string and parameter that it meets, unfolds formats without a limit, prints, and takes a
file cut short without a word. Here it keeps only the topics of our table, within limits, and says whether the file was
cut. It offers no hooks for that, so this module leans on some private names of the library; a test pins them.
"""

import io
import struct
import sys
from collections import deque
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

from pyulog import ULog, core
from pyulog.exceptions import ULogException

from service.domain.errors import UnreadableInput
from service.readers.reading import Progress
from service.readers.ulog_fields import TIME, TOPIC_NAMES
from service.readers.ulog_messages import Taker, go_through

CONTAINER_ERRORS: tuple[type[Exception], ...] = (
    ULogException,
    struct.error,
    LookupError,
    ValueError,
    TypeError,
    AttributeError,
    ArithmeticError,
    RecursionError,
    MemoryError,
)
"""All that the library is known or able to raise on bytes that are no log. (KeyError and IndexError are LookupErrors,
UnicodeDecodeError is a ValueError, OverflowError an ArithmeticError.)"""

HEADER_BYTES = 16
READ_BUFFER_BYTES = 1 << 20
MAXIMUM_FORMATS = 5_000
"""Kinds of message a file may define; real ones define some hundreds."""
MAXIMUM_FORMAT_BYTES = 8 << 20
MAXIMUM_FIELDS = 2_000
"""Fields of one needed topic, arrays unfolded; the largest met has 40."""
MAXIMUM_SUBSCRIPTIONS = 200
"""Instances of needed topics."""
MAXIMUM_DROPOUTS = 10_000
"""Records of lost data that are kept."""
DAMAGE_STEPS = 1_000_000
"""Steps by which the library may look for the next message in damage, about 2 s. Then reading stops."""
DAMAGE_STEP_BYTES = 40_000
"""Reading this much again counts as a step more."""


@dataclass(frozen=True, slots=True)
class Dropout:
    """The recorder's word that it lost data: the time of the message before, and the length it claims."""

    time_s: float
    duration_s: float


@dataclass(frozen=True, slots=True)
class Container:
    topics: list[Any]
    """One entry per topic and instance, as pyulog has them: `name`, `multi_id`, `data` (field -> array)."""
    dropouts: tuple[Dropout, ...]
    cut: bool
    """The file ends in mid-message, or so damaged that what follows could not be read."""


def load_container(path: Path, progress: Progress) -> Container:
    """Load the needed topics of a file.

    Raises
    ------
    UnreadableInput
        On anything that is no such container.
    """
    try:
        with _ProgressFile(path, progress) as raw, io.BufferedReader(raw, READ_BUFFER_BYTES) as file:
            log = _BoundedULog(file, path.stat().st_size)
    except CONTAINER_ERRORS as error:
        raise UnreadableInput(f"The log file cannot be decoded: {_plain(error)}.") from error
    dropouts = tuple(Dropout(d.timestamp * TIME.scale, d.duration * 1e-3) for d in log.dropouts)
    return Container(log.data_list, dropouts, log.is_cut)


def _plain(error: Exception) -> str:
    if isinstance(error, ULogException):
        return "its header is no log's, or it needs a newer reader"
    return f"its messages contradict each other ({type(error).__name__})"


class _ProgressFile(io.FileIO):
    """A file that tells how far it has been read, once per buffer."""

    def __init__(self, path: Path, progress: Progress) -> None:
        super().__init__(path, "rb")
        self._bytes = max(path.stat().st_size, 1)
        self._progress = progress

    def readinto(self, buffer: Any) -> int | None:
        count = super().readinto(buffer)
        self._progress(min(1.0, self.tell() / self._bytes))
        return count


_NEEDED = frozenset(name.encode() for name in TOPIC_NAMES)

_unpack_head = struct.Struct("<HB").unpack


class _Header(ULog._MessageHeader):  # type: ignore[misc]
    """Head of a message, and where it stands.

    `msg_size` never reaches beyond the file: the library goes back by it, whatever it could read.
    """

    def __init__(self, file: BinaryIO, file_bytes: int) -> None:
        super().__init__()
        self._file = file
        self._file_bytes = file_bytes
        self.leftover = 0
        """Bytes at the end of the file that are too few for a head."""
        self.end = 0
        """Offset at which the last message ends, or claims to."""

    def initialize(self, data: bytes) -> None:
        try:
            self.msg_size, self.msg_type = _unpack_head(data)
        except struct.error:
            self.leftover = len(data)
            raise
        at = self._file.tell()
        self.end = at + self.msg_size
        if self.end > self._file_bytes:
            self.msg_size = max(0, self._file_bytes - at)


class _Subscription(ULog._MessageAddLogged):  # type: ignore[misc]
    """Announces a topic. Only needed topics have their fields unfolded, and only so many."""

    def _parse_format(self, message_formats: dict[str, Any]) -> None:
        if self.message_name not in TOPIC_NAMES:
            return
        if _field_count(self.message_name, message_formats, depth=0) > MAXIMUM_FIELDS:
            raise UnreadableInput(f"A message of the log file has more than {MAXIMUM_FIELDS} fields.")
        super()._parse_format(message_formats)
        if not any(field.field_name == TIME.name and field.type_str == TIME.kind for field in self.field_data):
            raise ValueError("a topic without a time")


def _field_count(name: str, formats: dict[str, Any], depth: int) -> int:
    """Fields of a format with nested ones and arrays unfolded; stops counting beyond the limit."""
    if depth > 8:
        raise UnreadableInput("A message format of the log file contains itself.")
    total = 0
    for kind, length, _ in formats[name].fields:
        single = 1 if kind in ULog._UNPACK_TYPES else _field_count(kind, formats, depth + 1)
        # an empty format counts too: otherwise nested ones could be walked without end
        total += max(single, 1) * max(length, 1)
        if total > MAXIMUM_FIELDS:
            break
    return total


class _NoInfo:
    """Stands for an information or parameter message: none is read, so no answer can echo it."""

    key = type = ""
    value = None
    is_continued = False
    tag = 0


_NO_INFO = _NoInfo()


class _BoundedULog(ULog):  # type: ignore[misc]
    """Keeps the needed topics and nothing else."""

    _MessageAddLogged = _Subscription

    def __init__(self, file: BinaryIO, file_bytes: int) -> None:
        super().__init__(None)
        self._file = file
        self._file_bytes = file_bytes
        self._reached = HEADER_BYTES
        self._last_timestamp = 0
        self._damage_steps = 0.0
        self._format_bytes = 0
        self._logged_messages: deque[Any] = deque(maxlen=0)
        self._logged_messages_tagged: dict[int, deque[Any]] = {_NO_INFO.tag: deque(maxlen=0)}
        self._changed_parameters: deque[Any] = deque(maxlen=0)
        self._dropouts: deque[Any] = deque(maxlen=MAXIMUM_DROPOUTS)
        self._headers: list[_Header] = []
        self._load_file(file, _CountedNames())

    @property
    def is_cut(self) -> bool:
        """Whether the file ends in mid-message, before data that it announces, or where reading had to stop early."""
        reached = max(self._reached, *(header.end for header in self._headers))
        missing = any(offset >= self._file_bytes for offset in self._appended_offsets)
        leftover = any(header.leftover for header in self._headers)
        return reached != self._file_bytes or missing or leftover

    def _MessageHeader(self) -> _Header:  # noqa: N802 - the library's name
        self._headers.append(_Header(self._file, self._file_bytes))
        return self._headers[-1]

    def MessageFormat(self, data: bytes, header: _Header) -> Any:  # noqa: N802
        self._format_bytes += len(data)
        if len(self._message_formats) > MAXIMUM_FORMATS or self._format_bytes > MAXIMUM_FORMAT_BYTES:
            raise UnreadableInput(f"The log file defines more than {MAXIMUM_FORMATS} kinds of message.")
        return ULog.MessageFormat(data, header)

    def _MessageInfo(self, _data: bytes, _header: _Header, is_info_multiple: bool = False) -> _NoInfo:  # noqa: N802, ARG002
        return _NO_INFO

    def _MessageParameterDefault(self, _data: bytes, _header: _Header) -> _NoInfo:  # noqa: N802
        return _NO_INFO

    def MessageLogging(self, _data: bytes, _header: _Header) -> _NoInfo:  # noqa: N802
        return _NO_INFO

    def MessageLoggingTagged(self, _data: bytes, _header: _Header) -> _NoInfo:  # noqa: N802
        return _NO_INFO

    def _add_message_info_multiple(self, msg_info: _NoInfo) -> None:
        pass

    def _add_parameter_default(self, msg_param: _NoInfo) -> None:
        pass

    def _read_file_data(self, names: "_CountedNames", read_until: int | None = None) -> None:
        """Hurry over the sound messages; then let the library take what is left, and make arrays of it all."""
        go_through(
            self._file,
            {number: _taker(subscription) for number, subscription in self._subscriptions.items()},
            lambda kind, payload: self._take(kind, payload, names),
            sys.maxsize if read_until is None else read_until,
        )
        self._reached = max(self._reached, self._file.tell())
        super()._read_file_data(names, read_until)

    def _take(self, kind: int, payload: bytes, names: "_CountedNames") -> tuple[int, Taker] | None:
        """Take a sound message that is not data; for a needed topic, its number and where its data go."""
        if kind == ULog.MSG_TYPE_DROPOUT and len(payload) == 2:
            self._drop_out(payload)
        if kind != ULog.MSG_TYPE_ADD_LOGGED_MSG:
            return None
        subscription = self._subscribe(payload, names)
        return None if subscription is None else (subscription.msg_id, _taker(subscription))

    def _subscribe(self, payload: bytes, names: "_CountedNames") -> Any:
        """Take an announcement as the library does; None for a topic that is not needed, or nonsense."""
        if len(payload) > 3 and payload[3:] not in _NEEDED:
            self._filtered_message_ids.add(int.from_bytes(payload[1:3], "little"))
            return None
        try:
            subscription = self._MessageAddLogged(payload, None, self._message_formats)
        except (LookupError, ValueError, OverflowError, struct.error):
            self._file_corrupt = True
            return None
        if subscription.message_name not in names:
            return None
        self._subscriptions[subscription.msg_id] = subscription
        return subscription

    def _drop_out(self, payload: bytes) -> None:
        if len(self._dropouts) < MAXIMUM_DROPOUTS:
            latest = max(map(_last_timestamp, self._subscriptions.values()), default=0)
            self._last_timestamp = max(self._last_timestamp, latest)
            self._dropouts.append(ULog.MessageDropout(payload, None, self._last_timestamp))

    def _check_packet_corruption(self, header: _Header) -> bool:
        corrupt = bool(super()._check_packet_corruption(header))
        if corrupt:
            self._damage_steps += 1.0 + header.msg_size / DAMAGE_STEP_BYTES
            if self._damage_steps > DAMAGE_STEPS:
                # nothing more to read: the library ends as at the end of the file and keeps what it has
                self._file_handle = io.BytesIO()
        return corrupt


def _taker(subscription: Any) -> Taker:
    return Taker(subscription.buffer, subscription.dtype.itemsize, subscription.max_data_size)


def _last_timestamp(subscription: Any) -> int:
    at = len(subscription.buffer) - subscription.dtype.itemsize + subscription.timestamp_offset
    return int.from_bytes(subscription.buffer[at : at + 8], "little") if subscription.buffer else 0


class _CountedNames:
    """The needed names, as the library asks for them; refuses a file that announces needed topics without end."""

    def __init__(self) -> None:
        self.count = 0

    def __contains__(self, name: object) -> bool:
        if name not in TOPIC_NAMES:
            return False
        self.count += 1
        if self.count > MAXIMUM_SUBSCRIPTIONS:
            raise UnreadableInput(f"The log file announces more than {MAXIMUM_SUBSCRIPTIONS} instances of its sensors.")
        return True


def _silent(*_words: object, **_options: object) -> None:
    """In place of print within the library: standard output belongs to the answer."""


core.print = _silent

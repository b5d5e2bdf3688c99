"""CSV and its kin -> decoded log: one `time_s`, each stream at the rows where it has a value."""

import io
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TextIO

import numpy as np

from service.domain.arrays import FloatArray, IntArray
from service.domain.codes import LogFormat
from service.domain.errors import InputTooLarge, WrongValues
from service.domain.glossary import STREAM_OF, STREAMS
from service.domain.log import DecodedLog
from service.readers.columns import Columns, Complaints, log_from_columns
from service.readers.encoding import UTF16_MARKS, text_encoding
from service.readers.limits import ReadingLimits
from service.readers.reading import ReadRequest, ReadResult
from service.readers.table_cells import Block, parse_block
from service.readers.table_columns import TableColumn, escaped, table_columns
from service.readers.table_layout import Layout, LineSource, read_layout

BLOCK_CHARACTERS = 1 << 20
HEAD_BYTES = 1 << 16
"""Read to tell the encoding."""


def is_table(head: bytes) -> bool:
    """Whether a file that begins with `head` is text."""
    return bool(head) and (head.startswith(UTF16_MARKS) or b"\0" not in head)


def read_table(path: Path, request: ReadRequest) -> ReadResult:
    """Read a table with a header.

    Raises
    ------
    UnreadableInput
        No header, or no known name in it.
    WrongValues
        Wrong columns, units or cells; no probe or GPS; times missing, unsorted or repeated; impossible values.
    InputTooLarge
    """
    with path.open("rb") as raw:
        encoding = text_encoding(raw.read(HEAD_BYTES))
        raw.seek(0)
        file = io.TextIOWrapper(raw, encoding=encoding, errors="replace")
        size = max(path.stat().st_size, 1)
        layout = read_layout(LineSource(file, request.limits), request.limits)
        used = table_columns(layout, request.columns)
        gathered = _Gathered(used, request.limits)
        text = _TableText(file, layout, request.limits)
        for first_line, block in text.blocks():
            gathered.add(parse_block(block, first_line, layout, used))
            request.progress(min(1.0, raw.tell() / size))
        return ReadResult(gathered.log(request.sha256, text.cut))


class _TableText:
    """The lines of data in blocks; `cut` once a last line without end and with too few cells was left out."""

    def __init__(self, file: TextIO, layout: Layout, limits: ReadingLimits) -> None:
        self._file = file
        self._layout = layout
        self._limit = limits.line_characters
        self.cut = False

    def blocks(self) -> Iterator[tuple[int, list[str]]]:
        """Number of the first line, and whole lines without their ends."""
        number, pending = self._layout.next_line_number, self._layout.next_line
        while True:
            text = pending + self._file.read(BLOCK_CHARACTERS)
            rest = self._file.readline(self._limit + 1)
            text += rest
            if not text:
                return
            lines = text.split("\n")
            # before all else: a line too long for one read looks like one that is cut
            self._check_length(lines, number)
            self._leave_out_cut_line(lines)
            yield number, lines
            number, pending = number + text.count("\n"), ""

    def _check_length(self, lines: list[str], number: int) -> None:
        if max(map(len, lines)) > self._limit:
            line = number + next(index for index, text in enumerate(lines) if len(text) > self._limit)
            raise InputTooLarge(f"Line {line} is longer than {self._limit} characters.")

    def _leave_out_cut_line(self, lines: list[str]) -> None:
        """The last of `lines` is what stands behind the last line end: nothing, or a line that may be cut."""
        last = lines[-1]
        delimiter, width = self._layout.delimiter, len(self._layout.header)
        cells = len(last.split()) if delimiter is None else last.count(delimiter) + 1
        self.cut = bool(last.strip()) and cells < width
        if self.cut:
            lines[-1] = ""


@dataclass
class _Gathered:
    """The samples of each stream so far."""

    used: Sequence[TableColumn]
    limits: ReadingLimits
    rows: int = 0
    last_time_s: float = -np.inf
    times: dict[str, list[FloatArray]] = field(default_factory=dict)
    values: dict[str, list[FloatArray]] = field(default_factory=dict)
    lines: dict[str, list[IntArray]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.positions = {
            stream: [place for place, column in enumerate(self.used) if STREAM_OF.get(column.column) == stream]
            for stream in STREAMS
        }

    def add(self, block: Block) -> None:
        """Take the rows of a block to their streams."""
        self.rows += block.lines.size
        if self.rows > self.limits.table_rows:
            raise InputTooLarge(f"The table has more than {self.limits.table_rows} rows.")
        values = self._in_si(block.values)
        present = ~np.isnan(values).all(axis=1)
        values, lines = values[present], block.lines[present]
        self._check_times(values[:, 0], lines)
        for stream, positions in self.positions.items():
            if not positions:
                continue
            own = values[:, positions]
            sampled = ~np.isnan(own).all(axis=1)
            self.times.setdefault(stream, []).append(values[sampled, 0])
            self.values.setdefault(stream, []).append(own[sampled])
            self.lines.setdefault(stream, []).append(lines[sampled])

    def _in_si(self, values: FloatArray) -> FloatArray:
        for place, column in enumerate(self.used):
            if column.to_si.factor != 1.0 or column.to_si.offset != 0.0:
                values[:, place] = values[:, place] * column.to_si.factor + column.to_si.offset
        return values

    def _check_times(self, time_s: FloatArray, lines: IntArray) -> None:
        if not time_s.size:
            return
        before = np.concatenate([[self.last_time_s], time_s[:-1]])
        wrong = ~(time_s > before)
        if wrong.any():
            index = int(np.argmax(wrong))
            self._refuse_time(float(time_s[index]), float(before[index]), int(lines[index]))
        self.last_time_s = float(time_s[-1])

    def _refuse_time(self, time_s: float, before_s: float, line: int) -> None:
        if np.isnan(time_s):
            message = f"Line {line} has values but no time."
        else:
            word = "repeats" if time_s == before_s else "stands before"
            message = f"The time {time_s:.12g} s in line {line} {word} the one above it: times must strictly increase."
        raise WrongValues(message, {self._pointer("", "time_s"): message})

    def log(self, sha256: str, cut: bool) -> DecodedLog:
        """The log of all that was taken."""
        streams = {stream: self._columns(stream) for stream, positions in self.positions.items() if positions}
        lines = {stream: np.concatenate(parts) for stream, parts in self.lines.items()}
        complaints = Complaints(self._pointer, lambda stream, index: f"line {lines[stream][index]}")
        return log_from_columns(
            LogFormat.CSV,
            streams,
            complaints,
            sha256=sha256,
            start_utc=None,
            samples_per_stream=self.limits.samples_per_stream,
            truncated=cut,
        )

    def _columns(self, stream: str) -> Columns:
        names = [self.used[place].column for place in self.positions[stream]]
        values = np.concatenate(self.values.get(stream, [np.empty((0, len(names)))]))
        time_s = np.concatenate(self.times.get(stream, [np.empty(0)]))
        return {"time_s": time_s} | {name: np.ascontiguousarray(values[:, i]) for i, name in enumerate(names)}

    def _pointer(self, stream: str, column: str) -> str:
        """The user's own heading where the table has the column; a stream's first column stands for the stream."""
        name = column or STREAMS[stream][0]
        return "/" + next((escaped(c.heading) for c in self.used if c.column == name), name)

"""How a table is laid out: encoding, delimiter, header, perhaps a row of units. Told from its first lines."""

import csv
import re
from dataclasses import dataclass
from typing import TextIO

from service.domain.errors import InputTooLarge, UnreadableInput
from service.readers.limits import ReadingLimits

DELIMITERS = (",", ";", "\t", "|")
"""Of those that occur in the header the most frequent; without any, cells stand apart by blanks."""
COMMENT_MARKS = ("#", "%", "//")
DELIMITER_LINE = re.compile(r"sep=([,;\t|])", re.IGNORECASE)
"""First line of some spreadsheets' exports."""


@dataclass(frozen=True, slots=True)
class Layout:
    delimiter: str | None
    """None: runs of blanks and tabs."""
    header: tuple[str, ...]
    units: tuple[str, ...] | None
    """The row below the header, where it holds no number."""
    next_line: str
    """First line of data, already taken from the file; empty at its end."""
    next_line_number: int
    """Of that line, from 1."""


def is_comment(line: str) -> bool:
    """Whether a line is one, or blank."""
    text = line.lstrip()
    return not text or text.startswith(COMMENT_MARKS)


def is_number(cell: str) -> bool:
    """Whether a cell is a number, with decimal point or comma."""
    try:
        float(cell.strip().replace(",", "."))
    except ValueError:
        return False
    return "_" not in cell


def split_line(line: str, delimiter: str | None) -> list[str]:
    """The cells of one line, without blanks around them.

    Raises
    ------
    UnreadableInput
        Its quotes are out of order.
    """
    if delimiter is None:
        return line.split()
    try:
        rows = list(csv.reader([line.rstrip("\n")], delimiter=delimiter, skipinitialspace=True))
    except csv.Error as error:
        raise UnreadableInput(f"The header cannot be split into cells: {error}.") from error
    return [cell.strip() for row in rows for cell in row]


class LineSource:
    """Lines of a text file, counted, none longer than allowed."""

    def __init__(self, file: TextIO, limits: ReadingLimits) -> None:
        self._file = file
        self._limit = limits.line_characters
        self.number = 0
        """Of the line that was read last."""

    def read(self) -> str:
        """The next line with its end; empty at the end of the file.

        Raises
        ------
        InputTooLarge
        """
        line = self._file.readline(self._limit + 1)
        self.number += 1
        if len(line) > self._limit:
            raise InputTooLarge(f"Line {self.number} is longer than {self._limit} characters.")
        return line


def read_layout(lines: LineSource, limits: ReadingLimits) -> Layout:
    """Take the header, and what stands above it and right below it, off a file.

    Raises
    ------
    UnreadableInput
        There is no header.
    InputTooLarge
        Too many columns, or too long a line.
    """
    forced, comment, line = _first_content(lines)
    delimiter = forced or find_delimiter(line)
    header = split_line(line, delimiter)
    if header and all(is_number(cell) for cell in header if cell):
        return _headed_by_comment(comment, line, lines.number, limits)
    _check_width(header, limits)
    following = _next_content(lines)
    cells = split_line(following, delimiter)
    if any(cells) and not any(is_number(cell) for cell in cells):
        units = tuple(cell.strip("[]() ") for cell in cells)
        following = _next_content(lines)
        return Layout(delimiter, tuple(header), units, following, lines.number)
    return Layout(delimiter, tuple(header), None, following, lines.number)


def _first_content(lines: LineSource) -> tuple[str | None, str, str]:
    """A delimiter if the file names one, the last comment, the first line that is neither."""
    forced, comment = None, ""
    while line := lines.read():
        named = DELIMITER_LINE.fullmatch(line.rstrip("\n")) if lines.number == 1 else None
        if named:
            forced = named.group(1)
        elif not is_comment(line):
            return forced, comment, line
        elif line.strip():
            comment = line.strip()
    raise UnreadableInput("The table is empty: no line holds more than blanks or comments.")


def _headed_by_comment(comment: str, line: str, number: int, limits: ReadingLimits) -> Layout:
    """Some exports write the header as a comment."""
    text = comment.lstrip("".join(COMMENT_MARKS)).strip()
    delimiter = find_delimiter(text)
    header = split_line(text, delimiter)
    if len(header) < 2:
        raise UnreadableInput(f"Line {number} holds numbers, but no header of column names stands above it.")
    _check_width(header, limits)
    return Layout(delimiter, tuple(header), None, line, number)


def _next_content(lines: LineSource) -> str:
    while line := lines.read():
        if not is_comment(line):
            break
    return line


def _check_width(header: list[str], limits: ReadingLimits) -> None:
    if len(header) > limits.table_columns:
        raise InputTooLarge(f"The table has {len(header)} columns; the limit is {limits.table_columns}.")


def find_delimiter(header: str) -> str | None:
    """The delimiter of a header; quoted text does not count."""
    bare = re.sub(r'"[^"]*"', "", header)
    counts = {delimiter: bare.count(delimiter) for delimiter in DELIMITERS}
    best = max(counts, key=lambda delimiter: counts[delimiter])
    return best if counts[best] else None

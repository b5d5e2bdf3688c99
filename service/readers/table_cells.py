"""Cells of a table -> numbers, a block of lines at a time.

Blocks without anything odd take a fast way through numpy; any other, and any with an error, goes cell by cell, which
also finds the line and the column to blame. Both give the same numbers.
"""

import csv
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.domain.arrays import FloatArray, IntArray
from service.domain.errors import WrongValues
from service.readers.table_columns import TableColumn, escaped
from service.readers.table_layout import COMMENT_MARKS, Layout, is_comment

NO_SAMPLE = frozenset({"", "nan", "na", "n/a", "null", "none"})
"""Cells, in lower case, that mean no sample."""
LONGEST_ECHO = 40
"""Characters of a wrong cell that an error repeats."""


@dataclass(frozen=True, slots=True)
class Block:
    """Rows of a table: values (n, k) of the used columns as written, NaN for no sample, and their line numbers (n,)."""

    values: FloatArray
    lines: IntArray


def parse_block(lines: list[str], first_line: int, layout: Layout, used: Sequence[TableColumn]) -> Block:
    """Parse a block of lines.

    Parameters
    ----------
    lines : without their ends.
    first_line : number of the first one.

    Raises
    ------
    WrongValues
        A cell is no number or a row has another number of cells than the header; the message says where.
    """
    kept = [index for index, line in enumerate(lines) if not is_comment(line)]
    if not kept:
        return Block(np.empty((0, len(used))), np.empty(0, dtype=np.int64))
    rows = [lines[index] for index in kept]
    values = _parse_fast(rows, layout, used)
    if values is not None:
        return Block(values, np.array(kept, dtype=np.int64) + first_line)
    return _parse_slowly(lines, first_line, layout, used)


def _parse_fast(rows: list[str], layout: Layout, used: Sequence[TableColumn]) -> FloatArray | None:
    """None where this way cannot go."""
    delimiter, width = layout.delimiter, len(layout.header)
    if delimiter is None:
        if any(len(row.split()) != width for row in rows):
            return None
        text = "\n".join(rows)
    else:
        # a quoted delimiter makes one too many, so that with the right number quotes mean nothing
        if any(row.count(delimiter) != width - 1 for row in rows):
            return None
        text = _with_blanks_named("\n".join(rows).replace('"', ""), delimiter)
    if delimiter != ",":
        text = text.replace(",", ".")
    try:
        values = np.loadtxt(
            text.split("\n"),
            delimiter=delimiter,
            usecols=[column.index for column in used],
            comments=None,
            ndmin=2,
        )
    except ValueError:
        return None
    return values if not np.isinf(values).any() else None


def _with_blanks_named(text: str, delimiter: str) -> str:
    """Blank cells become `nan`."""
    if " " in text or (delimiter != "\t" and "\t" in text):
        blanks = " " if delimiter == "\t" else " \t"
        text = delimiter.join([cell.strip(blanks) for cell in text.split(delimiter)])
    named = f"{delimiter}nan{delimiter}"
    # twice: a cell's end is the next one's beginning
    text = text.replace(delimiter * 2, named).replace(delimiter * 2, named)
    text = text.replace(f"\n{delimiter}", f"\nnan{delimiter}").replace(f"{delimiter}\n", f"{delimiter}nan\n")
    return ("nan" if text.startswith(delimiter) else "") + text + ("nan" if text.endswith(delimiter) else "")


def _parse_slowly(lines: list[str], first_line: int, layout: Layout, used: Sequence[TableColumn]) -> Block:
    values: list[list[float]] = []
    numbers: list[int] = []
    for number, cells in _rows(lines, first_line, layout.delimiter):
        if not cells or (cells[0].startswith(COMMENT_MARKS)) or not any(cells):
            continue
        _check_width(cells, number, layout)
        values.append([_number(cells[column.index], number, column, layout) for column in used])
        numbers.append(number)
    return Block(np.array(values, dtype=np.float64).reshape(-1, len(used)), np.array(numbers, dtype=np.int64))


def _rows(lines: list[str], first_line: int, delimiter: str | None) -> list[tuple[int, list[str]]]:
    if delimiter is None:
        return [(first_line + index, line.split()) for index, line in enumerate(lines)]
    reader = csv.reader(lines, delimiter=delimiter, skipinitialspace=True)
    try:
        return [(first_line + reader.line_num - 1, [cell.strip() for cell in row]) for row in reader]
    except csv.Error as error:
        line = first_line + reader.line_num
        raise WrongValues(f"Line {line} cannot be split into cells: {error}.") from error


def _check_width(cells: list[str], number: int, layout: Layout) -> None:
    width = len(layout.header)
    if len(cells) < width or any(cells[width:]):
        raise WrongValues(f"Line {number} has {len(cells)} cells, the header has {width}.")


def _number(cell: str, line: int, column: TableColumn, layout: Layout) -> float:
    if cell.lower() in NO_SAMPLE:
        return np.nan
    try:
        # among commas that delimit, one within a number is a decimal or a thousands' mark: who knows
        value = float(cell if layout.delimiter == "," else cell.replace(",", "."))
    except ValueError:
        value = np.inf
    if not np.isfinite(value) or "_" in cell:
        message = f"Line {line}, column {column.index + 1}: {cell[:LONGEST_ECHO]!r} is no finite number."
        raise WrongValues(message, {f"/{escaped(column.heading)}": message})
    return value

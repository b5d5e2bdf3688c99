"""Which column of a table holds what: names of the contract, or foreign names that the user explains."""

from collections.abc import Mapping
from dataclasses import dataclass
from difflib import get_close_matches

from service.domain.errors import UnreadableInput, WrongValues
from service.domain.settings import ColumnMeaning
from service.readers.table_layout import Layout
from service.readers.units import COLUMN_NAMES, SAME, ToSI, column_named, to_si

LONGEST_NAME = 40
"""Longer names are no misspelt name of the contract."""


@dataclass(frozen=True, slots=True)
class TableColumn:
    index: int
    """In the table, from 0."""
    heading: str
    column: str
    """Name of the contract."""
    to_si: ToSI


def escaped(name: str) -> str:
    """A name as a token of a JSON Pointer (RFC 6901)."""
    return name[:100].replace("~", "~0").replace("/", "~1")


def table_columns(layout: Layout, meanings: Mapping[str, ColumnMeaning]) -> list[TableColumn]:
    """The columns that hold something of ours, time first. Columns with other names are left aside, unless they look
    like a misspelt one.

    Raises
    ------
    WrongValues
        Gathered: no time, a quantity twice, an unknown quantity or unit, a name that is almost one of ours.
    UnreadableInput
        No column is known at all: this is no table for us.
    """
    meanings = {heading.strip(): meaning for heading, meaning in meanings.items()}
    errors: dict[str, str] = {}
    used: dict[str, TableColumn] = {}
    for index, heading in enumerate(layout.header):
        unit = layout.units[index] if layout.units is not None and index < len(layout.units) else ""
        found = _column(index, heading, unit, meanings, errors)
        if found is None:
            continue
        if found.column in used:
            errors[f"/{escaped(heading)}"] = f"A second column holds {found.column}."
        used.setdefault(found.column, found)
    _check_meanings(layout, meanings, errors)
    if not used and not errors:
        raise UnreadableInput("This is no log: neither a ULog nor JSON, nor a table with a column name that is known.")
    _check_near_misses(layout, used, meanings, errors)
    if "time_s" not in used:
        errors.setdefault("/time_s", "A column time_s is required.")
    if errors:
        raise WrongValues("The columns of the table are wrong: " + " ".join(errors.values()), errors)
    return sorted(used.values(), key=lambda column: column.column != "time_s")


def _column(
    index: int, heading: str, unit: str, meanings: Mapping[str, ColumnMeaning], errors: dict[str, str]
) -> TableColumn | None:
    meaning = meanings.get(heading)
    if meaning is None:
        name = heading.lower()
        return _checked(index, heading, name, None, unit, errors) if name in COLUMN_NAMES else None
    column = column_named(meaning.quantity)
    if column is None:
        errors[f"/settings/columns/{escaped(heading)}"] = f"Unknown quantity; known are {', '.join(COLUMN_NAMES)}."
        return None
    return _checked(index, heading, column, meaning.unit, unit, errors)


def _checked(
    index: int, heading: str, column: str, unit: str | None, unit_below: str, errors: dict[str, str]
) -> TableColumn | None:
    """The column with its unit: the user's, else of the row below the header, else of the name."""
    stated = unit if unit is not None else unit_below if heading.lower() != column else None
    try:
        conversion = SAME if not stated else to_si(column, stated)
        below = to_si(column, unit_below) if unit_below else conversion
    except WrongValues as error:
        errors[f"/{escaped(heading)}"] = str(error)
        return None
    if below != conversion:
        errors[f"/{escaped(heading)}"] = (
            f"The row of units says {unit_below[:20]!r}, which is not the unit of this column."
        )
        return None
    return TableColumn(index, heading, column, conversion)


def _check_meanings(layout: Layout, meanings: Mapping[str, ColumnMeaning], errors: dict[str, str]) -> None:
    for heading in meanings:
        if heading not in layout.header:
            errors[f"/settings/columns/{escaped(heading)}"] = "The table has no column of this name."


def _check_near_misses(
    layout: Layout, used: Mapping[str, TableColumn], meanings: Mapping[str, ColumnMeaning], errors: dict[str, str]
) -> None:
    """A column that is left aside by a slip of the pen would change the answer without a word."""
    for heading in layout.header:
        meant = None if heading in meanings else _meant(heading.lower())
        if meant is not None and meant not in used:
            message = f"Is this {meant}? Name it so, or explain it in settings.columns with its unit."
            errors.setdefault(f"/{escaped(heading)}", message)


def _meant(name: str) -> str | None:
    if len(name) > LONGEST_NAME or name in COLUMN_NAMES:
        return None
    stem = name.rpartition("_")[0]
    close = get_close_matches(name, COLUMN_NAMES, n=1, cutoff=0.88)
    return column_named(name) or column_named(stem) or (close[0] if close else None)

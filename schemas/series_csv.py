"""A series as CSV: cautions as comment lines, a header, one row a sample; blank cells where JSON has null."""

from collections.abc import Iterable, Iterator, Mapping
from typing import Any

import numpy as np
from marshmallow import Schema

from schemas.fields import flag_lists
from service.domain.arrays import FlagArray, FloatArray

ROWS_AT_ONCE = 10_000
BETWEEN_FLAGS = " "


def csv_series(
    schema: type[Schema],
    columns: Mapping[str, FloatArray] | None,
    flags: FlagArray | None,
    remarks: Iterable[str],
    cautions: Iterable[Mapping[str, Any]],
) -> Iterator[str]:
    """The table in pieces, with the same numbers as in JSON.

    Parameters
    ----------
    schema : of the series in JSON; its columns in its order.
    columns : arrays of equal length; None where there is no such series: a header alone.
    flags : bit masks, written as names with blanks between.
    remarks : further comment lines.
    cautions : code and message each.
    """
    yield "".join(f"# {remark}\n" for remark in remarks)
    yield "".join(f"# caution {caution['code']}: {caution['message']}\n" for caution in cautions)
    names = [name for name in schema().fields if name != "flags"]
    yield ",".join((*names, "flags")) + "\n"
    if columns is None or flags is None:
        return
    rounded = schema(exclude=("flags",)).dump(columns)
    for start in range(0, flags.size, ROWS_AT_ONCE):
        piece = slice(start, start + ROWS_AT_ONCE)
        cells = [_cells(rounded[name][piece]) for name in names]
        named = [BETWEEN_FLAGS.join(sample) for sample in flag_lists(flags[piece])]
        yield "".join(",".join(row) + "\n" for row in zip(*cells, named, strict=True))


def _cells(column: FloatArray) -> list[str]:
    finite = np.isfinite(column)
    return [repr(value) if there else "" for value, there in zip(column.tolist(), finite.tolist(), strict=True)]

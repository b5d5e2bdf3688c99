"""Samples of a series at even steps: the nearest to each step, with the flags of all that it stands for."""

from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from service.domain.arrays import FlagArray, FloatArray

Columns = Mapping[str, FloatArray]
IndexArray = npt.NDArray[np.intp]


def thinned(
    columns: Columns, flags: FlagArray, step_s: float, start_s: float
) -> tuple[dict[str, FloatArray], FlagArray]:
    """One sample for each step that holds any: the one nearest to the middle of the step.

    Steps are `step_s` long and centred on `start_s`, `start_s` + `step_s`, ... A sample belongs to the step whose
    centre is nearest. Samples keep their own times; steps without samples are left out.

    Parameters
    ----------
    columns : arrays of equal length n, `time_s` among them, increasing [s].
    flags : (n,) bit masks; those of a step's samples are joined.
    step_s : above 0 [s].
    """
    time_s = columns["time_s"]
    if time_s.size == 0:
        return dict(columns), flags
    # as floats: a tiny step would overflow whole numbers
    steps = np.floor((time_s - start_s) / step_s + 0.5)
    first = np.flatnonzero(np.diff(steps, prepend=-np.inf) != 0)
    distance_s = np.abs(time_s - (start_s + steps * step_s))
    nearest = _least_of_each(distance_s, first)
    joined = np.bitwise_or.reduceat(flags, first)
    return {name: column[nearest] for name, column in columns.items()}, joined


def _least_of_each(values: FloatArray, first: IndexArray) -> IndexArray:
    """Index of the least value (the earlier of two) in each stretch that begins at `first`."""
    stretch = np.zeros(values.size, np.intp)
    stretch[first[1:]] = 1
    order: IndexArray = np.lexsort((values, np.cumsum(stretch)))
    return order[first]

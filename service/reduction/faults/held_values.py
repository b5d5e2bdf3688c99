"""Runs of readings that repeat the same value: what a stuck or a saturated sensor shows, told from coarse rounding."""

from dataclasses import dataclass

import numpy as np

from service.domain.arrays import FloatArray, IntArray

SAME_SHARE = 1e-3
"""Steps below this share of the usual step count as no step: a stored float32 may differ in its last digit."""
TAIL = 0.95
"""The quantile of run lengths that stands for the longest usual run."""
FEWEST_RUNS = 20
"""With fewer runs nothing is known of the usual run; one sample is assumed."""


@dataclass(frozen=True, slots=True)
class HeldRuns:
    """Runs of equal consecutive values, each array (k,): indices into the samples given, NaN samples never in a run."""

    first: IntArray
    length: IntArray
    value: FloatArray
    usual_length: float
    """Length that 95 % of the runs do not pass: 1 for a fine sensor, several for a coarsely rounded or repeated one."""


def held_runs(values: FloatArray) -> HeldRuns:
    """Runs of equal values of (n,) samples without NaN, singles included."""
    if values.size == 0:
        empty = np.empty(0, dtype=np.int64)
        return HeldRuns(empty, empty, np.empty(0), 1.0)
    step = np.abs(np.diff(values))
    moved = step[step > 0.0]
    tolerance = SAME_SHARE * float(np.median(moved)) if moved.size else 0.0
    first = np.concatenate([[0], np.flatnonzero(step > tolerance) + 1])
    length = np.diff(np.concatenate([first, [values.size]]))
    usual = float(np.quantile(length, TAIL)) if length.size >= FEWEST_RUNS else 1.0
    return HeldRuns(first, length, values[first], usual)


def rounding_step(values: FloatArray) -> float:
    """Smallest difference between distinct values of (n,) samples: the rounding step where there is one; 0 for one value."""
    distinct = np.unique(values[np.isfinite(values)])
    steps = np.diff(distinct)
    return float(steps.min()) if steps.size else 0.0

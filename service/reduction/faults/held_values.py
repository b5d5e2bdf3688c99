"""Runs of readings that repeat the same value: what a stuck or a saturated sensor shows, told from coarse rounding."""

from dataclasses import dataclass

import numpy as np

from service.domain.arrays import FloatArray, IntArray

SAME_SHARE = 1e-3
"""Steps below this share of the usual step count as no step: a stored float32 may differ in its last digit."""
TAIL = 0.95
"""The quantile of run lengths that stands for a long usual run."""
MOST_FAULTS = 3
"""Runs that may be faults of one flight: the next in length after them still counts as usual."""
FEWEST_DISTINCT = 10
FEWEST_BESIDE = 50
FEWEST_RUNS = 20
"""With fewer runs nothing is known of the usual run; one sample is assumed."""


@dataclass(frozen=True, slots=True)
class HeldRuns:
    """Runs of equal consecutive values, each array (k,): indices into the samples given, NaN samples never in a run."""

    first: IntArray
    length: IntArray
    value: FloatArray
    tolerance: float
    """Values that differ by no more count as equal."""
    coarse: bool
    """So few distinct values beside the longest run that rounding alone may hold any of them."""

    def unusual_length(self, factor: float) -> float:
        """Samples of a run that rounding and a slow sensor do not explain: `factor` times what 95 % of the runs do not
        pass, and half of it times the longest usual one."""
        if self.length.size < FEWEST_RUNS:
            return factor
        long, longest = np.quantile(self.length, TAIL), np.sort(self.length)[-1 - MOST_FAULTS]
        return float(max(factor * long, 0.5 * factor * longest))


def held_runs(values: FloatArray) -> HeldRuns:
    """Runs of equal values of (n,) samples without NaN, singles included."""
    if values.size == 0:
        empty = np.empty(0, dtype=np.int64)
        return HeldRuns(empty, empty, np.empty(0), 0.0, False)
    step = np.abs(np.diff(values))
    moved = step[step > 0.0]
    tolerance = SAME_SHARE * float(np.median(moved)) if moved.size else 0.0
    first = np.concatenate([[0], np.flatnonzero(step > tolerance) + 1])
    length = np.diff(np.concatenate([first, [values.size]]))
    beside = values.size - int(length.max())
    coarse = beside >= FEWEST_BESIDE and np.unique(values).size < FEWEST_DISTINCT
    return HeldRuns(first, length, values[first], tolerance, bool(coarse))


def rounding_step(values: FloatArray) -> float:
    """Smallest difference between distinct values of (n,) samples: the step of rounding, if any; 0 for one value."""
    distinct = np.unique(values[np.isfinite(values)])
    steps = np.diff(distinct)
    return float(steps.min()) if steps.size else 0.0

"""Spans of time and runs of samples, as every step needs them."""

import numpy as np

from service.domain.arrays import BoolArray, FloatArray


def within(time_s: FloatArray, spans: FloatArray) -> BoolArray:
    """(n,) whether each time lies in one of the (k, 2) spans, ends included."""
    inside = np.zeros(time_s.size, dtype=bool)
    for start, end in spans:
        inside |= (time_s >= start) & (time_s <= end)
    return inside


def runs(mask: BoolArray) -> list[tuple[int, int]]:
    """First and one-past-last index of every run of True."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], mask, [False]]).astype(np.int8)))
    return list(zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True))

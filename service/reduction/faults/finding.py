"""What a check hands back, and how samples become spans."""

from dataclasses import dataclass

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.results import Fault


@dataclass(frozen=True, slots=True)
class Finding:
    """A fault and the samples of the series that it spoils, both masks (n,)."""

    fault: Fault
    probe_samples: BoolArray
    static_samples: BoolArray


def probe_finding(
    kind: FaultKind, time_s: FloatArray, samples: BoolArray, message: str, span_s: tuple[float, float] | None = None
) -> Finding:
    """A fault of the probe that spoils `samples` (n,); its span is theirs unless given."""
    start_s, end_s = span_s if span_s is not None else span_of(time_s, samples)
    return Finding(Fault(kind, "probe", start_s, end_s, message), samples, np.zeros(samples.size, dtype=bool))


def span_of(time_s: FloatArray, samples: BoolArray) -> tuple[float, float]:
    """First and last time of the True samples, of which there is at least one. [s]"""
    where = np.flatnonzero(samples)
    return float(time_s[where[0]]), float(time_s[where[-1]])


def episodes(time_s: FloatArray, samples: BoolArray, join_s: float) -> list[tuple[int, int]]:
    """First and one-past-last index of each group of True samples, split where two are more than `join_s` apart."""
    where = np.flatnonzero(samples)
    if where.size == 0:
        return []
    breaks = np.flatnonzero(np.diff(time_s[where]) > join_s)
    firsts = where[np.concatenate([[0], breaks + 1])]
    lasts = where[np.concatenate([breaks, [where.size - 1]])]
    return list(zip(firsts.tolist(), (lasts + 1).tolist(), strict=True))


def time_groups(spans_s: FloatArray, join_s: float) -> list[tuple[float, float]]:
    """Spans (k, 2) of time, in order, with those that overlap or are no more than `join_s` apart made one. [s]"""
    groups: list[tuple[float, float]] = []
    for start_s, end_s in spans_s[np.argsort(spans_s[:, 0])].tolist():
        if groups and start_s - groups[-1][1] <= join_s:
            groups[-1] = (groups[-1][0], max(groups[-1][1], end_s))
        else:
            groups.append((start_s, end_s))
    return groups


def only(size: int, first: int, last: int) -> BoolArray:
    """(size,) True from `first` up to, not including, `last`."""
    mask = np.zeros(size, dtype=bool)
    mask[first:last] = True
    return mask


def widened(time_s: FloatArray, samples: BoolArray, by_s: float) -> BoolArray:
    """(n,) the True samples and those no more than `by_s` away from one."""
    where = np.flatnonzero(samples)
    if where.size == 0:
        return samples
    before = time_s[where[np.maximum(np.searchsorted(where, np.arange(samples.size), side="right") - 1, 0)]]
    after = time_s[where[np.minimum(np.searchsorted(where, np.arange(samples.size)), where.size - 1)]]
    return np.asarray((np.abs(time_s - before) <= by_s) | (np.abs(after - time_s) <= by_s))

"""Spikes: lone readings far from their neighbours on both sides, against the usual scatter about them.

The scatter is taken locally (Hampel's identifier: running median and median absolute deviation), so gusts, turns and a
take-off roll seen once a second set their own scale.
"""

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from scipy.ndimage import median_filter

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, episodes, probe_finding
from service.reduction.faults.held_values import rounding_step

SCATTERS = 8.0
"""How many robust standard deviations make a spike."""
SCATTER_WINDOW = 51
NEIGHBOURS = 3
"""On each side; of two spikes among them the median takes no notice of one."""
DEVIATION_TO_SIGMA = 1.4826
"""Standard deviation of a normal variable over its median absolute deviation."""
SHARE_OF_LEVEL = 0.02
"""Deviations below this share of the reading's usual size harm nothing."""
JOIN_S = 30.0
"""Spikes closer than this are told as one fault,"""
JOIN_GAPS = 9.0
"""and those within this many of the usual gap between them: of spikes at random one gap in 500 is longer."""


def find_spikes(evidence: FlightEvidence) -> list[Finding]:
    """Groups of spikes; only the spikes themselves are spoiled."""
    time_s = evidence.series.time_s
    known = np.flatnonzero(np.isfinite(evidence.reading_pa))
    if known.size < 2 * NEIGHBOURS + 1:
        return []
    spiky = np.zeros(time_s.size, dtype=bool)
    spiky[known] = _spiky(evidence.reading_pa[known])
    findings = []
    for first, last in episodes(time_s, spiky, _join_s(time_s[spiky])):
        inside = spiky.copy()
        inside[:first] = inside[last:] = False
        message = (
            f"{int(inside.sum())} lone readings far off their neighbours between {time_s[first]:.1f} s and "
            f"{time_s[last - 1]:.1f} s. They were left out; check the wiring for loose contacts and interference."
        )
        findings.append(probe_finding(FaultKind.SPIKES, time_s, inside, message))
    return findings


def _join_s(spike_s: FloatArray) -> float:
    """Gap that still belongs to one group of (m,) spikes at random. [s]"""
    return max(JOIN_S, JOIN_GAPS * float(np.median(np.diff(spike_s)))) if spike_s.size > 2 else JOIN_S


def _spiky(reading: FloatArray) -> BoolArray:
    windows = sliding_window_view(np.pad(reading, NEIGHBOURS, mode="reflect"), 2 * NEIGHBOURS + 1)
    neighbours = np.delete(windows, NEIGHBOURS, axis=1)
    deviation = np.abs(reading - np.median(neighbours, axis=1))
    scatter = DEVIATION_TO_SIGMA * median_filter(deviation, min(SCATTER_WINDOW, reading.size), mode="nearest")
    usual = DEVIATION_TO_SIGMA * float(np.median(deviation))
    level = SHARE_OF_LEVEL * float(np.median(np.abs(reading)))
    off = _off_both_sides(reading, neighbours)
    return np.asarray(off > np.maximum(SCATTERS * np.maximum(scatter, max(usual, rounding_step(reading))), level))


def _off_both_sides(reading: FloatArray, neighbours: FloatArray) -> FloatArray:
    """(n,) how far each sample lies outside the medians of its neighbours before and after; 0 between them."""
    before = reading - np.median(neighbours[:, :NEIGHBOURS], axis=1)
    after = reading - np.median(neighbours[:, NEIGHBOURS:], axis=1)
    return np.where(before * after > 0.0, np.minimum(np.abs(before), np.abs(after)), 0.0)

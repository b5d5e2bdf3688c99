"""Swapped tubes: the reading falls below its zero in flight, by as much as it should rise."""

import numpy as np
from scipy.ndimage import uniform_filter1d

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, episodes, only, probe_finding

LEAST_SHARE = 0.1
"""Of the dynamic pressure by GPS: half of what the least sensitive probe (pressure scale 5) reads."""
SMOOTHING_S = 2.0
JOIN_S = 5.0
SHORTEST_S = 4.0
WHOLE_SHARE = 0.8
"""From this share of the flight on, a negative reading may be a negative raw zero: how it moves must then decide."""
AGAINST = -0.05
"""Correlation of reading and airspeed by GPS: sound flights keep above it, even at one airspeed in gusts."""
PART_SHARE = 0.2
"""From this share on, a reading that moves against the airspeed is swapped throughout: no tube is changed in flight."""


def find_swapped(evidence: FlightEvidence) -> list[Finding]:
    """Spans in flight where the reading is well below its zero."""
    time_s = evidence.series.time_s
    below = _below_zero(evidence)
    findings = []
    for first, last in episodes(time_s, below, JOIN_S):
        inside = only(time_s.size, first, last) & evidence.airborne
        if time_s[last - 1] - time_s[first] < SHORTEST_S or below[first:last].mean() < 0.5:
            continue
        message = (
            f"The reading is negative in flight from {time_s[first]:.1f} s to {time_s[last - 1]:.1f} s. "
            "Total and static tubes are most likely swapped: exchange them at the sensor and fly again."
        )
        findings.append(probe_finding(FaultKind.SWAPPED, time_s, inside, message))
    return findings


def _below_zero(evidence: FlightEvidence) -> BoolArray:
    usable = evidence.moving & np.isfinite(evidence.reading_pa)
    below = np.zeros(usable.size, dtype=bool)
    where = np.flatnonzero(usable)
    if where.size < 3:
        return below
    zero_pa = evidence.zero.value_pa if evidence.zero else 0.0
    reading = _smoothed(evidence.reading_pa[where] - zero_pa, evidence.interval_s)
    low = reading < -LEAST_SHARE * evidence.expected_pa[where]
    if evidence.zero is None:
        low = _judged_by_motion(low, reading, evidence.expected_pa[where])
    below[where[low]] = True
    return below


def _judged_by_motion(low: BoolArray, reading: FloatArray, expected: FloatArray) -> BoolArray:
    """What is swapped where no zero is known: all if the reading falls as the airspeed by GPS rises, else a part."""
    known = np.isfinite(expected)
    against = known.any() and _correlation(reading[known], expected[known]) < AGAINST
    if against and low.mean() > PART_SHARE:
        return np.ones(low.size, dtype=bool)
    return low if low.mean() < WHOLE_SHARE else np.zeros(low.size, dtype=bool)


def _correlation(first: FloatArray, second: FloatArray) -> float:
    """0 where either does not vary."""
    first, second = first - first.mean(), second - second.mean()
    scale = float(np.sqrt(np.sum(first**2) * np.sum(second**2)))
    return float(np.sum(first * second)) / scale if scale > 0.0 else 0.0


def _smoothed(values: FloatArray, interval_s: float) -> FloatArray:
    return np.asarray(
        uniform_filter1d(values, max(min(round(SMOOTHING_S / interval_s), values.size), 1), mode="nearest")
    )

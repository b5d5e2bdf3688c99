"""Saturation: readings that pile up at one end of the sensor's range, given or seen."""

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, episodes, only, probe_finding
from service.reduction.faults.held_values import held_runs

AT_FULL_SCALE = 0.999
FEWEST_SAMPLES = 3
USUAL_RUNS = 3.0
"""A plateau at the flight's own extreme is this many times as long as 95 % of its other runs."""
LONGEST_LONE_PLATEAU_S = 3.0
FEWEST_OTHER_VALUES = 10
"""A flight that shows fewer readings elsewhere is frozen, not saturated."""
JOIN_S = 3.0
"""Peaks cut off closer than this are one span: what lies between them is the lower half of the truth."""


def find_saturated(evidence: FlightEvidence) -> list[Finding]:
    """Spans at the top (or, for swapped tubes, the bottom) of the range."""
    time_s = evidence.series.time_s
    at_limit = _at_full_scale(evidence) | _at_own_extreme(evidence, 1.0) | _at_own_extreme(evidence, -1.0)
    findings = []
    for first, last in episodes(time_s, at_limit, JOIN_S):
        limit = float(evidence.reading_pa[first])
        message = (
            f"The reading is cut off at {limit:.1f} Pa between {time_s[first]:.1f} s and {time_s[last - 1]:.1f} s: the "
            "sensor's range ends there and the true pressure is larger. Use a sensor with a wider range, or fly slower."
        )
        findings.append(probe_finding(FaultKind.SATURATED, time_s, only(time_s.size, first, last), message))
    return findings


def _at_full_scale(evidence: FlightEvidence) -> BoolArray:
    if evidence.full_scale_pa is None:
        return np.zeros(evidence.reading_pa.size, dtype=bool)
    return np.abs(evidence.reading_pa) >= AT_FULL_SCALE * evidence.full_scale_pa


def _at_own_extreme(evidence: FlightEvidence, sign: float) -> BoolArray:
    """(n,) in flight, at the largest value of sign times the reading, if readings pile up there."""
    limit_hit = np.zeros(evidence.reading_pa.size, dtype=bool)
    flying = np.flatnonzero(np.isfinite(evidence.reading_pa) & evidence.airborne)
    if flying.size == 0:
        return limit_hit
    reading: FloatArray = sign * evidence.reading_pa[flying]
    limit = float(reading.max())
    held = held_runs(reading)
    at_top = np.maximum.reduceat(reading, held.first) >= limit
    if held.coarse or reading.size - held.length[at_top].sum() < FEWEST_OTHER_VALUES:
        return limit_hit
    plateau = held.length[at_top] >= max(FEWEST_SAMPLES, held.unusual_length(USUAL_RUNS))
    seconds = float(held.length[at_top].max()) * evidence.interval_s
    # One long plateau that is never met again is a frozen reading that happened to be the largest.
    if not plateau.any() or (at_top.sum() == 1 and seconds > LONGEST_LONE_PLATEAU_S):
        return limit_hit
    limit_hit[flying[reading >= limit - held.tolerance]] = True
    return limit_hit

"""Blocked with the drain open: in flight the reading lies at its zero, where the least sensitive probe would show air.

This is the plain case, where the zero is known. A raw sensor that was never at rest is left to `no_airflow`.
"""

from dataclasses import replace

import numpy as np
from scipy.ndimage import median_filter, uniform_filter1d

from service.domain.arrays import BoolArray, FloatArray, IntArray
from service.domain.codes import FaultKind
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, episodes, only, probe_finding, widened

NOTHING_SHARE = 0.1
"""Of the dynamic pressure by GPS: half of what the least sensitive probe (pressure scale 5) reads."""
NOTHING_SHARE_WIND_UNKNOWN = 0.03
"""The same where only the ground speed is known, which a tail wind may double."""
FLOWING_SHARE = 0.8
"""Of the reading usual at that airspeed: below it the reading is already sinking, or still coming back."""
SMOOTHING_S = 1.0
JOIN_S = 2.0
SHORTEST_S = 4.0
LONGEST_SINKING_S = 12.0
"""A drained line loses its pressure within seconds,"""
LONGEST_RETURN_S = 2.0
"""and has it back at once when the hole is free."""


SPOILED_BESIDE_S = 1.0
"""On either side of what is told: a hole that closes or opens makes a sample or two that are neither."""


def no_airflow_finding(
    kind: FaultKind, time_s: FloatArray, samples: BoolArray, airborne: BoolArray, message: str
) -> Finding:
    """A span without airflow (n,), which spoils the flown samples beside it as well."""
    finding = probe_finding(kind, time_s, samples, message)
    return replace(finding, probe_samples=samples | (widened(time_s, samples, SPOILED_BESIDE_S) & airborne))


def blocked_message(start_s: float, end_s: float) -> str:
    """What is told of a blocked probe, by whichever check it was found."""
    return (
        f"The probe reads no airflow from {start_s:.1f} s to {end_s:.1f} s in flight. Its ram hole is most likely "
        "blocked (insect, ice, water, a cover left on) or its total tube is off: clear it, blow-test it before flying."
    )


def find_blocked(evidence: FlightEvidence) -> list[Finding]:
    """Spans in flight where the reading lies at the known zero, the sinking and the coming back included."""
    time_s = evidence.series.time_s
    where = np.flatnonzero(evidence.moving & np.isfinite(evidence.reading_pa) & np.isfinite(evidence.expected_pa))
    if evidence.zero is None or where.size < 3:
        return []
    ratio = _sensed_share(evidence, where)
    nothing = NOTHING_SHARE if evidence.wind_known else NOTHING_SHARE_WIND_UNKNOWN
    dead = np.abs(ratio) < nothing
    sound = ratio[~dead]
    flowing = FLOWING_SHARE * float(np.median(sound)) if sound.size else np.inf
    findings = []
    for first, last in episodes(time_s[where], dead, JOIN_S):
        if time_s[where[last - 1]] - time_s[where[first]] < SHORTEST_S:
            continue
        first, last = _with_sinking(time_s[where], ratio < flowing, first, last)
        start, end = int(where[first]), int(where[last - 1])
        message = blocked_message(time_s[start], time_s[end])
        span = only(time_s.size, start, end + 1)
        findings.append(no_airflow_finding(FaultKind.BLOCKED, time_s, span, evidence.airborne, message))
    return findings


def _sensed_share(evidence: FlightEvidence, where: IntArray) -> FloatArray:
    """Smoothed reading above zero over the dynamic pressure by GPS, at the samples `where`."""
    assert evidence.zero is not None
    # no wider than the data: a hostile log may claim a billion samples a second
    width = max(min(round(SMOOTHING_S / evidence.interval_s), where.size), 1)
    reading = evidence.reading_pa[where] - evidence.zero.value_pa
    smooth = uniform_filter1d(median_filter(reading, 3, mode="nearest"), width, mode="nearest")
    return np.asarray(smooth / np.maximum(evidence.expected_pa[where], 1.0))


def _with_sinking(time_s: FloatArray, low: BoolArray, first: int, last: int) -> tuple[int, int]:
    """The samples from `first` to before `last`, widened over the neighbours that are still or again low."""
    flowing_before = np.flatnonzero(~low[:first])
    flowing_after = np.flatnonzero(~low[last:])
    start = int(flowing_before[-1]) + 1 if flowing_before.size else 0
    end = last + int(flowing_after[0]) if flowing_after.size else low.size
    earliest = int(np.searchsorted(time_s, time_s[first] - LONGEST_SINKING_S))
    latest = int(np.searchsorted(time_s, time_s[last - 1] + LONGEST_RETURN_S))
    return max(start, earliest), min(end, max(latest, last))

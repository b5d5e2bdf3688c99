"""Frozen: the same value again and again in flight, longer than rounding and a slow sensor explain."""

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.codes import FaultKind
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, only, probe_finding
from service.reduction.faults.held_values import held_runs

USUAL_RUNS = 6.0
"""A frozen run is this many times as long as 95 % of the flight's runs, and half as many times as the longest usual."""
FEWEST_SAMPLES = 5
SHORTEST_S = 3.0
UNCHANGED_SHARE = 1e-3
"""Of the dynamic pressure by GPS: the noise of any receiver moves it by several times as much."""


def find_frozen(evidence: FlightEvidence) -> list[Finding]:
    """Runs of equal readings in the air."""
    time_s = evidence.series.time_s
    flying = np.flatnonzero(np.isfinite(evidence.reading_pa) & evidence.airborne)
    held = held_runs(evidence.reading_pa[flying])
    if held.coarse:
        return []
    fewest = max(held.unusual_length(USUAL_RUNS), FEWEST_SAMPLES)
    findings = []
    for index in np.flatnonzero(held.length >= fewest).tolist():
        first, last = flying[held.first[index]], flying[held.first[index] + held.length[index] - 1]
        if time_s[last] - time_s[first] < SHORTEST_S or _held_speed(evidence, int(first), int(last)):
            continue
        first, last = _to_the_ground(evidence.reading_pa, int(first), int(last))
        message = (
            f"The reading stays at exactly {held.value[index]:.2f} Pa from {time_s[first]:.1f} s to "
            f"{time_s[last]:.1f} s in flight, where air never stands still. The sensor or its data line had stopped; "
            "power-cycle and test it on the ground before flying."
        )
        findings.append(probe_finding(FaultKind.FROZEN, time_s, only(time_s.size, first, last + 1), message))
    return findings


def _held_speed(evidence: FlightEvidence, first: int, last: int) -> bool:
    """Whether by GPS, too, nothing changed: examples without noise hold their airspeed exactly, real air never."""
    if not evidence.wind_known:
        return False
    expected = evidence.expected_pa[first : last + 1]
    return bool(np.ptp(expected) < UNCHANGED_SHARE * np.max(np.abs(expected)))


def _to_the_ground(reading: FloatArray, first: int, last: int) -> tuple[int, int]:
    """The run with the equal readings on the ground beside it."""
    same = reading == reading[first]
    before = np.flatnonzero(~same[:first])
    after = np.flatnonzero(~same[last:])
    start = int(before[-1]) + 1 if before.size else 0
    end = last + int(after[0]) - 1 if after.size else reading.size - 1
    return start, end

"""Frozen: the same value again and again in flight, longer than rounding and a slow sensor explain."""

import numpy as np

from service.domain.arrays import FloatArray, IntArray
from service.domain.codes import FaultKind
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, only, probe_finding
from service.reduction.faults.held_values import HeldRuns, held_runs

USUAL_RUNS = 6.0
"""A frozen run is this many times as long as 95 % of the flight's runs, and half as many times as the longest usual."""
FEWEST_SAMPLES = 5
SHORTEST_S = 3.0
UNCHANGED_SHARE = 1e-3
"""Of the dynamic pressure by GPS: the noise of any receiver moves it by several times as much."""

WITHOUT_NOISE_SHARE = 0.8
"""Of the samples in flight, that a made example without noise holds at a few levels,"""
LEAST_SPREAD = 0.2
"""whose dynamic pressure by GPS differs by this share of its mean,"""
LARGEST_MISFIT = 0.3
"""and from which the levels differ by no more than this share of the difference: the wind is rough."""


def find_frozen(evidence: FlightEvidence) -> list[Finding]:
    """Runs of equal readings in the air."""
    time_s = evidence.series.time_s
    flying = np.flatnonzero(np.isfinite(evidence.reading_pa) & evidence.airborne)
    held = held_runs(evidence.reading_pa[flying])
    fewest = max(held.unusual_length(USUAL_RUNS), FEWEST_SAMPLES)
    if held.coarse or _without_noise(evidence, flying, held, fewest):
        return []
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


def _without_noise(evidence: FlightEvidence, flying: IntArray, held: HeldRuns, fewest: float) -> bool:
    """Whether nearly the whole flight is such runs and their levels go with the airspeed by GPS, as in made examples.

    A frozen sensor holds one level, or some that have nothing to do with the airspeed.
    """
    long = np.flatnonzero(held.length >= fewest)
    share = held.length[long].sum() / max(flying.size, 1)
    if evidence.zero is None or not evidence.wind_known or long.size == 0 or share < WITHOUT_NOISE_SHARE:
        return False
    middle = flying[held.first[long] + held.length[long] // 2]
    level, expected = held.value[long] - evidence.zero.value_pa, evidence.expected_pa[middle]
    if not np.isfinite(expected).all() or np.ptp(expected) < LEAST_SPREAD * float(expected.mean()):
        return False
    scale = float(level @ expected) / float(expected @ expected)
    return bool(np.max(np.abs(level - scale * expected)) < LARGEST_MISFIT * scale * np.ptp(expected))


def _to_the_ground(reading: FloatArray, first: int, last: int) -> tuple[int, int]:
    """The run with the equal readings on the ground beside it."""
    same = reading == reading[first]
    before = np.flatnonzero(~same[:first])
    after = np.flatnonzero(~same[last:])
    start = int(before[-1]) + 1 if before.size else 0
    end = last + int(after[0]) - 1 if after.size else reading.size - 1
    return start, end

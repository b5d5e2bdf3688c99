"""Frozen static: the pressure stands still while GPS climbs, or repeats one value longer than rounding explains."""

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.codes import FaultKind
from service.domain.log import StaticSamples
from service.domain.results import AirDataSeries, Fault
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding
from service.reduction.faults.held_values import FEWEST_RUNS, held_runs, rounding_step

USUAL_RUNS = 10.0
SHORTEST_S = 5.0
FEWEST_SAMPLES = 5
PASCAL_PER_METRE = 12.0
CLIMB_M = 8.0
"""Change of GPS altitude that a static sensor cannot miss: GPS height wanders by some metres."""


def find_frozen_static(evidence: FlightEvidence) -> list[Finding]:
    """Spans, judged on the static sensor's own samples."""
    static, series = evidence.static, evidence.series
    if static is None or static.time_s.size < FEWEST_SAMPLES:
        return []
    findings = []
    for start_s, end_s, pressure_pa in _held_spans(static, series):
        spoiled = (series.time_s >= start_s) & (series.time_s <= end_s)
        message = (
            f"The static pressure stays at exactly {pressure_pa:.1f} Pa from {start_s:.1f} s to {end_s:.1f} s "
            "in flight. Altitude and density are unknown there; check the static sensor and its port."
        )
        fault = Fault(FaultKind.FROZEN_STATIC, "static", start_s, end_s, message)
        findings.append(Finding(fault, np.zeros(spoiled.size, dtype=bool), spoiled))
    return findings


def _held_spans(static: StaticSamples, series: AirDataSeries) -> list[tuple[float, float, float]]:
    """Start and end [s] of the runs of equal pressure in flight that no sound sensor shows, and the pressure."""
    known = np.isfinite(static.static_pressure_pa)
    time_s, pressure = static.time_s[known], static.static_pressure_pa[known]
    held = held_runs(pressure)
    start_s, end_s = time_s[held.first], time_s[held.first + held.length - 1]
    flown_s = _flown_seconds(series, start_s, end_s)
    long = (held.length >= FEWEST_SAMPLES) & (flown_s >= SHORTEST_S)
    beyond_rounding = (held.length.size >= FEWEST_RUNS) & (held.length >= held.unusual_length(USUAL_RUNS))
    spans = []
    for index in np.flatnonzero(long).tolist():
        climb = _climb_m(series, start_s[index], end_s[index])
        if beyond_rounding[index] or climb > CLIMB_M + rounding_step(pressure) / PASCAL_PER_METRE:
            spans.append((float(start_s[index]), float(end_s[index]), float(held.value[index])))
    return spans


def _flown_seconds(series: AirDataSeries, start_s: FloatArray, end_s: FloatArray) -> FloatArray:
    """(k,) time in the air within each span. [s]"""
    if series.time_s.size < 2:
        return np.zeros(start_s.size)
    flown = np.concatenate([[0.0], np.cumsum(np.diff(series.time_s) * ~series.on_ground[1:])])
    return np.asarray(np.interp(end_s, series.time_s, flown) - np.interp(start_s, series.time_s, flown))


def _climb_m(series: AirDataSeries, start_s: float, end_s: float) -> float:
    """Spread of GPS altitude in the span, outliers apart. [m] 0 where unknown."""
    inside = (series.gps_time_s >= start_s) & (series.gps_time_s <= end_s) & np.isfinite(series.gps_altitude_m)
    if inside.sum() < FEWEST_SAMPLES:
        return 0.0
    low, high = np.quantile(series.gps_altitude_m[inside], [0.1, 0.9])
    return float(high - low)

"""Frozen static: the pressure repeats one value longer than rounding explains, or stays where it is while GPS climbs.

The second sign is also that of a blocked port, whose sensor still shows its noise. If the probe takes its static
pressure from the same port, its reading follows the altitude too, and is spoiled with it.
"""

from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.log import StaticSamples
from service.domain.results import AirDataSeries, Fault
from service.domain.spans import within
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, time_groups
from service.reduction.faults.held_values import FEWEST_RUNS, held_runs, rounding_step

USUAL_RUNS = 10.0
SHORTEST_S = 5.0
FEWEST_SAMPLES = 5
PASCAL_PER_METRE = 12.0
CLIMB_M = 8.0
"""Change of GPS altitude that a static sensor cannot miss: GPS height wanders by some metres."""
WINDOW_S = 30
"""Seconds, and one-second means, over which a port that does not follow is told."""
WINDOW_CLIMB_M = 20.0
FOLLOWED_SHARE = 0.2
"""Of the climb: a port that shows less of it is blocked."""
MOST_SECONDS = 500_000
"""Longer logs are not searched for blocked ports: a hostile one may span years."""
READING_EXPLAINED = 0.8
"""Of the reading's variance, by altitude: from here on the probe shares the blocked port."""


@dataclass(frozen=True, slots=True)
class _Held:
    start_s: float
    end_s: float
    message: str


def find_frozen_static(evidence: FlightEvidence) -> list[Finding]:
    """Spans, judged on the static sensor's own samples."""
    static, series = evidence.static, evidence.series
    if static is None or static.time_s.size < FEWEST_SAMPLES or series.time_s.size < FEWEST_SAMPLES:
        return []
    repeated = _repeated(static, series)
    spans = np.array([(held.start_s, held.end_s) for held in repeated]).reshape(-1, 2)
    findings = []
    for held in [*repeated, *_not_following(static, series, spans)]:
        spoiled = (series.time_s >= held.start_s) & (series.time_s <= held.end_s)
        probe = spoiled if _probe_follows(evidence, spoiled) else np.zeros(spoiled.size, dtype=bool)
        fault = Fault(FaultKind.FROZEN_STATIC, "static", held.start_s, held.end_s, held.message)
        findings.append(Finding(fault, probe, spoiled))
    return findings


def _repeated(static: StaticSamples, series: AirDataSeries) -> list[_Held]:
    """Runs of equal pressure in flight that no sound sensor shows."""
    known = np.isfinite(static.static_pressure_pa)
    time_s, pressure = static.time_s[known], static.static_pressure_pa[known]
    held = held_runs(pressure)
    start_s, end_s = time_s[held.first], time_s[held.first + held.length - 1]
    long = (held.length >= FEWEST_SAMPLES) & (_flown_seconds(series, start_s, end_s) >= SHORTEST_S)
    beyond_rounding = (held.length.size >= FEWEST_RUNS) & (held.length >= held.unusual_length(USUAL_RUNS))
    found = []
    for index in np.flatnonzero(long).tolist():
        start, end = float(start_s[index]), float(end_s[index])
        climb = _climb_m(series, start, end)
        if beyond_rounding[index] or climb > CLIMB_M + rounding_step(pressure) / PASCAL_PER_METRE:
            message = (
                f"The static pressure stays at exactly {held.value[index]:.1f} Pa from {start:.1f} s to {end:.1f} s "
                "in flight. Altitude and density are unknown there; check the static sensor and its port."
            )
            found.append(_Held(start, end, message))
    return found


def _not_following(static: StaticSamples, series: AirDataSeries, told_s: FloatArray) -> list[_Held]:
    """Spans in which the pressure does not follow the altitude by GPS, those already told left out."""
    seconds, pressure, altitude, flown = _by_the_second(static, series)
    if seconds.size < WINDOW_S:
        return []
    flown &= ~within(seconds, told_s)
    pressure_spread, altitude_spread = (_spread(values) for values in (pressure, altitude))
    climbed = np.isfinite(pressure_spread) & (altitude_spread > WINDOW_CLIMB_M)
    climbed &= sliding_window_view(flown, WINDOW_S).all(axis=1)
    still = climbed & (pressure_spread < FOLLOWED_SHARE * PASCAL_PER_METRE * altitude_spread)
    starts = seconds[: still.size][still]
    found = []
    for start, end in time_groups(np.column_stack([starts, starts + WINDOW_S - 1.0]), WINDOW_S):
        message = (
            f"The static pressure does not follow the altitude by GPS from {start:.1f} s to {end:.1f} s: its port is "
            "most likely blocked. Altitude and density are unknown there; clear the port."
        )
        found.append(_Held(start, end, message))
    return found


def _by_the_second(
    static: StaticSamples, series: AirDataSeries
) -> tuple[FloatArray, FloatArray, FloatArray, BoolArray]:
    """Times a second apart, mean pressure and GPS altitude about each (NaN where unknown), and whether in flight."""
    first, last = series.time_s[0], series.time_s[-1]
    if last - first > MOST_SECONDS or last - first < WINDOW_S:
        nothing = np.empty(0)
        return nothing, nothing, nothing, np.empty(0, dtype=bool)
    seconds = first + 0.5 + np.arange(int(last - first))
    flown = np.interp(seconds, series.time_s, ~series.on_ground) > 0.5
    pressure = _means(static.time_s, static.static_pressure_pa, seconds)
    return seconds, pressure, _means(series.gps_time_s, series.gps_altitude_m, seconds), flown


def _means(time_s: FloatArray, values: FloatArray, about_s: FloatArray) -> FloatArray:
    """Mean of the finite values within a second about each time; NaN where there is none."""
    known = np.isfinite(values)
    time_s, values = time_s[known], values[known]
    if values.size == 0:
        return np.full(about_s.size, np.nan)
    low, high = np.searchsorted(time_s, about_s - 1.0), np.searchsorted(time_s, about_s + 1.0)
    running = np.concatenate([[0.0], np.cumsum(values - values[0])])
    mean = values[0] + (running[high] - running[low]) / np.maximum(high - low, 1)
    return np.where(high > low, mean, np.nan)


def _spread(values: FloatArray) -> FloatArray:
    """Difference between the means of the last and the first third of every window: a climb, not a lone jump."""
    windows, third = sliding_window_view(values, WINDOW_S), WINDOW_S // 3
    return np.asarray(np.abs(windows[:, -third:].mean(axis=1) - windows[:, :third].mean(axis=1)))


def _probe_follows(evidence: FlightEvidence, spoiled: BoolArray) -> bool:
    """Whether the probe's reading follows the altitude in the span, as it does from a shared, blocked port."""
    series = evidence.series
    chosen = spoiled & np.isfinite(evidence.reading_pa) & np.isfinite(series.altitude_m) & ~series.on_ground
    if chosen.sum() < FEWEST_SAMPLES:
        return False
    height, reading = series.altitude_m[chosen], evidence.reading_pa[chosen]
    if np.ptp(height) < CLIMB_M:
        return False
    correlation = _correlation(height, reading)
    # Climbing away from a blocked port the reading falls.
    return correlation < 0.0 and correlation**2 > READING_EXPLAINED


def _correlation(first: FloatArray, second: FloatArray) -> float:
    first, second = first - first.mean(), second - second.mean()
    scale = float(np.sqrt(np.sum(first**2)) * np.sqrt(np.sum(second**2)))
    return float(np.sum(first * second)) / scale if scale > 0.0 else 0.0


def _flown_seconds(series: AirDataSeries, start_s: FloatArray, end_s: FloatArray) -> FloatArray:
    """(k,) time in the air within each span. [s]"""
    flown = np.concatenate([[0.0], np.cumsum(np.diff(series.time_s) * ~series.on_ground[1:])])
    return np.asarray(np.interp(end_s, series.time_s, flown) - np.interp(start_s, series.time_s, flown))


def _climb_m(series: AirDataSeries, start_s: float, end_s: float) -> float:
    """Spread of GPS altitude in the span, outliers apart. [m] 0 where unknown."""
    inside = (series.gps_time_s >= start_s) & (series.gps_time_s <= end_s) & np.isfinite(series.gps_altitude_m)
    if inside.sum() < FEWEST_SAMPLES:
        return 0.0
    low, high = np.quantile(series.gps_altitude_m[inside], [0.1, 0.9])
    return float(high - low)

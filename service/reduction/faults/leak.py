"""Leak: from one moment on, or for a span, the probe reads a smaller share of the pressure.

Looked for after a first fit, which knows wind and scale, by signs that must agree on the size of the step:

- the level: probe airspeed over wind-corrected ground speed is lower inside the span than outside (`scale_levels`);
- the edges: a leak opens at once, and within tenths of a second a gust changes little (`reading_edges`).

Each is a measure of the same step with its own variance; they are averaged by their weights. The thresholds lie above
what 540 simulated sound flights showed: 4.9 deviations for one edge and 5.8 for two, 5.4 and 6.3 with readings rounded
to 1 Pa; by edges alone 5.3 and 6.1, 5.1 and 6.4 rounded. (One of 240 others, at two airspeeds with a raw zero, reached
5.4.)

What the data hold: an edge stands out from what the air does within a few samples, 0.3 % of the speed in calm air,
0.6 % in light and 1.1 % in moderate turbulence; the level of half a flight of a dozen circles is known to 0.5 to 1.2 %.
So steps of less than some 3 % of the speed, in moderate turbulence 5 %, are mostly left alone.
"""

from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from service.airdata.constants import SEA_LEVEL_DENSITY_KGPM3
from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind, ZeroOffsetSource
from service.domain.results import AirDataSeries, Estimate, Fault, FittedPoints, Loiter
from service.domain.spans import runs
from service.reduction.faults.evidence import known_zero
from service.reduction.faults.finding import widened
from service.reduction.faults.reading_edges import Edges, edges_of_reading, extreme_in_bins
from service.reduction.faults.scale_levels import levels_of_spans

FEWEST_POINTS = 24
ONE_EDGE = 5.5
TWO_EDGES = 7.0
"""Deviations at which a step is told: of a leak that stays, and of one that closes again, which has more ways to be."""
LEAST_LEVEL = 2.0
"""Deviations that the level alone must show."""
LARGEST_DISAGREEMENT = 16.0
"""Chi-square of level and edges about their mean."""
ONE_EDGE_ALONE = 6.2
TWO_EDGES_ALONE = 8.0
"""Deviations at which edges are told where the level cannot tell, or is uncertain: gusts make edges of 5 at most."""
CONFIRMING_SHARE = 0.25
"""Of the edge's step, that the level must then show if it can tell."""
SLOWEST_INTERVAL_S = 0.25
"""Between slower samples a manoeuvre makes an edge as well: there the level must speak."""
NARROWEST = 3
"""Points within a span that edges alone tell, and outside of it."""
SHORTEST_FAULT_S, BESIDE_FAULT_S = 1.0, 5.0
"""Of another fault that makes edges of its own, and how far from it they may be told."""
LEAST_ZERO_UNCERTAINTY_PA = 1.0
"""However sure the fit is of the zero: with two airspeeds it may have taken the leak for one."""
UNKNOWN_ZERO_PA = 100.0
"""Doubt about a zero that only the fit tells,"""
ZERO_CONTRADICTED_PA = 5.0
"""as one is that differs by more from what is known of the sensor: several standard uncertainties."""
LEAST_STEP = 0.02
"""Of speed: smaller ones are not worth a word."""


class Fitted(Protocol):
    """What is asked of the fit."""

    @property
    def pressure_scale(self) -> float: ...

    @property
    def zero_offset_pa(self) -> float: ...

    @property
    def covariance(self) -> FloatArray: ...

    @property
    def zero_offset_source(self) -> ZeroOffsetSource: ...

    @property
    def gps_delay_s(self) -> Estimate | None: ...


@dataclass(frozen=True, slots=True)
class _Measure:
    """A measure of the step: values and weights (1 / variance), 0 where there is none; broadcast to (k + 1, k + 1)."""

    value: FloatArray
    weight: FloatArray
    time_s: FloatArray


def find_scale_step(
    points: FittedPoints,
    loiters: tuple[Loiter, ...],
    fit: Fitted,
    *,
    series: AirDataSeries | None = None,
    usable: BoolArray | None = None,
) -> Fault | None:
    """The span in which the probe reads a smaller share of the pressure than in the rest of the flight, if any.

    Parameters
    ----------
    points : of the fit.
    series, usable : the readings, and (n,) those that may be looked at; without them the edges are not seen, and only
        the level speaks.
    """
    if points.time_s.size < FEWEST_POINTS or not loiters:
        return None
    known = known_zero(series, None) if series is not None else None
    fitted = fit.zero_offset_source is ZeroOffsetSource.FITTED
    given_up = fitted and (known is None or abs(fit.zero_offset_pa - known.value_pa) > ZERO_CONTRADICTED_PA)
    step = _search(points, fit, _zero_doubt_pa(fit, given_up), series, usable)
    if step is None and given_up and known is not None:
        # The fit may have taken a leak for a wrong zero: look again with the zero that it gave up.
        again = _with_zero(points, fit, known.value_pa)
        step = _search(again, fit, known.standard_uncertainty_pa, series, usable, known.value_pa)
    if step is None:
        return None
    first_s, last_s = _flown(series, loiters)
    start_s = first_s if step.start_s is None else step.start_s
    end_s = last_s if step.end_s is None else step.end_s
    less = -100.0 * np.expm1(2.0 * step.size)
    message = (
        f"From {start_s:.1f} s to {end_s:.1f} s the probe reads {less:.0f} % less pressure than in the rest of the "
        "flight at the same airspeed. A leak, water or dirt in the lines is likely: test them."
    )
    return Fault(FaultKind.LEAK, "probe", start_s, end_s, message)


@dataclass(frozen=True, slots=True)
class _Step:
    """Of ln speed, between two times; None at an end of the flight."""

    size: float
    start_s: float | None
    end_s: float | None


def _search(
    points: FittedPoints,
    fit: Fitted,
    zero_doubt_pa: float,
    series: AirDataSeries | None,
    usable: BoolArray | None,
    given_up_zero_pa: float | None = None,
) -> _Step | None:
    """The likeliest step, if it is significant; with a zero that the fit gave up, by edges alone."""
    # What a wrong zero adds to the speed V: K / density times its error, over V.
    levels = levels_of_spans(points, fit.pressure_scale * zero_doubt_pa / SEA_LEVEL_DENSITY_KGPM3)
    delay_s = fit.gps_delay_s.value if fit.gps_delay_s is not None else 0.0
    time_s = levels.points.time_s - delay_s
    edges = _edges(series, usable, fit.zero_offset_pa if given_up_zero_pa is None else given_up_zero_pa)
    opening, closing = _edge_measure(edges, time_s, -1.0), _edge_measure(edges, time_s, 1.0)
    level, variance = levels.between(_late(opening, time_s), _late(closing, time_s))
    looks = [_by_all(level, variance, opening, closing)] if given_up_zero_pa is None else []
    if _quick(series):
        looks.append(_by_edges(level, variance, opening, closing))
    if not looks:
        return None
    excess, mean = max(looks, key=lambda look: float(look[0].max()))
    start, end = np.unravel_index(int(np.argmax(excess)), excess.shape)
    if excess[start, end] < 1.0:
        return None
    return _Step(
        float(mean[start, end]),
        None if start == 0 else _time_of(opening, time_s, int(start)),
        None if end == time_s.size else _time_of(closing, time_s, int(end)),
    )


def _zero_doubt_pa(fit: Fitted, given_up: bool) -> float:
    """A zero that was fitted may have taken the leak with it: then the level may not count on it."""
    found = float(np.sqrt(max(fit.covariance[1, 1], 0.0)))
    return UNKNOWN_ZERO_PA if given_up else max(found, LEAST_ZERO_UNCERTAINTY_PA)


def _with_zero(points: FittedPoints, fit: Fitted, zero_pa: float) -> FittedPoints:
    """The points with another zero offset, and the scale that then makes their speeds right in the middle."""
    more = 2.0 * fit.pressure_scale * (fit.zero_offset_pa - zero_pa) / SEA_LEVEL_DENSITY_KGPM3
    speed = np.sqrt(np.maximum(points.probe_true_airspeed_mps**2 + more, 0.0))
    factor = float(np.median(points.wind_corrected_speed_mps)) / max(float(np.median(speed)), 1e-3)
    return replace(points, probe_true_airspeed_mps=factor * speed)


def _flown(series: AirDataSeries | None, loiters: tuple[Loiter, ...]) -> tuple[float, float]:
    """First and last time in the air, to which a leak reaches that neither opens nor closes in the loiters. [s]"""
    if series is None or series.on_ground.all():
        return loiters[0].start_s, loiters[-1].end_s
    flown = series.time_s[~series.on_ground]
    return float(flown[0]), float(flown[-1])


def _edges(series: AirDataSeries | None, usable: BoolArray | None, zero_pa: float) -> Edges:
    if series is None:
        return Edges(np.empty(0), np.empty(0), np.empty(0))
    chosen = np.isfinite(series.reading_pa) & ~series.on_ground
    if usable is not None:
        chosen &= usable & ~_beside_a_fault(series.time_s, usable)
    return edges_of_reading(series.time_s[chosen], series.reading_pa[chosen] - zero_pa)


def _beside_a_fault(time_s: FloatArray, usable: BoolArray) -> BoolArray:
    """(n,) samples close to a span that cannot be used: an edge there is the other fault's."""
    lasting = np.zeros(usable.size, dtype=bool)
    for first, last in runs(~usable):
        lasting[first:last] = time_s[last - 1] - time_s[first] > SHORTEST_FAULT_S
    return widened(time_s, lasting, BESIDE_FAULT_S)


def _quick(series: AirDataSeries | None) -> bool:
    if series is None or series.time_s.size < 2:
        return False
    return float(np.median(np.diff(series.time_s))) <= SLOWEST_INTERVAL_S


def _edge_measure(edges: Edges, time_s: FloatArray, sign: float) -> _Measure:
    """The strongest edge of a sign between each two neighbouring points, as a measure of the step at that boundary."""
    count = time_s.size + 1
    best = extreme_in_bins(edges, np.searchsorted(time_s, edges.time_s), count, sign)
    value, weight, moment = np.zeros(count), np.zeros(count), np.full(count, np.nan)
    seen = best >= 0
    seen[[0, -1]] = False
    value[seen], moment[seen] = -sign * edges.step[best[seen]], edges.time_s[best[seen]]
    weight[seen] = 1.0 / edges.deviation[best[seen]] ** 2
    return _Measure(value, weight, moment)


def _late(measure: _Measure, time_s: FloatArray) -> FloatArray:
    """(k + 1,) how much later than the border of its two points each edge is, in usual lengths of a point; 0 beyond."""
    length_s = float(np.median(np.diff(time_s)))
    late = np.zeros(measure.time_s.size)
    before = (measure.time_s[1:-1] - time_s[:-1]) / length_s - 0.5
    after = (measure.time_s[1:-1] - time_s[1:]) / length_s + 0.5
    late[1:-1] = np.nan_to_num(np.minimum(before, 0.0) + np.maximum(after, 0.0))
    return late


def _by_all(
    level: FloatArray, variance: FloatArray, opening: _Measure, closing: _Measure
) -> tuple[FloatArray, FloatArray]:
    """Significance of every span over its threshold, by level and edges, and the size of its step."""
    mean, weight, disagreement = _average((level, 1.0 / variance), *_both(opening, closing))
    agreed = (disagreement < LARGEST_DISAGREEMENT) & (mean < -LEAST_STEP)
    agreed &= level < -LEAST_LEVEL * np.sqrt(np.where(np.isfinite(variance), variance, 0.0))
    return np.where(agreed, -mean * np.sqrt(weight), 0.0) / _threshold(level.shape, ONE_EDGE, TWO_EDGES), mean


def _by_edges(
    level: FloatArray, variance: FloatArray, opening: _Measure, closing: _Measure
) -> tuple[FloatArray, FloatArray]:
    """The same by the edges alone, where the level agrees or cannot tell."""
    edge, weight, _ = _average(*_both(opening, closing))
    confirmed = ~np.isfinite(variance) | (level < CONFIRMING_SHARE * edge)
    alone = confirmed & (edge < -LEAST_STEP) & _wide(level.shape)
    threshold = _threshold(level.shape, ONE_EDGE_ALONE, TWO_EDGES_ALONE)
    return np.where(alone, -edge * np.sqrt(weight), 0.0) / threshold, edge


def _both(opening: _Measure, closing: _Measure) -> tuple[tuple[FloatArray, FloatArray], tuple[FloatArray, FloatArray]]:
    return (opening.value[:, None], opening.weight[:, None]), (closing.value[None, :], closing.weight[None, :])


def _average(*measures: tuple[FloatArray, FloatArray]) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Weighted mean, its weight, and chi-square of the measures (values, weights) about it."""
    weight = np.asarray(sum(w for _, w in measures))
    mean = np.asarray(sum(v * w for v, w in measures)) / np.maximum(weight, 1e-12)
    return mean, weight, np.asarray(sum((v - mean) ** 2 * w for v, w in measures))


def _threshold(shape: tuple[int, ...], stays: float, closes: float) -> FloatArray:
    """For spans that reach an end of the flight, and for those between two edges."""
    threshold = np.full(shape, closes)
    threshold[0, :] = threshold[:, -1] = stays
    return threshold


def _wide(shape: tuple[int, ...]) -> BoolArray:
    """Spans that hold some points, and leave some outside."""
    wide = np.triu(np.ones(shape, dtype=bool), NARROWEST)
    wide[:NARROWEST, -NARROWEST:] = False
    return wide


def _time_of(measure: _Measure, time_s: FloatArray, boundary: int) -> float:
    """Time of the edge at a boundary, else the middle between its points. [s]"""
    edge = float(measure.time_s[boundary])
    return edge if np.isfinite(edge) else float(0.5 * (time_s[boundary - 1] + time_s[boundary]))

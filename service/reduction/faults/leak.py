"""Leak: from one moment on, or for a span, the probe reads a smaller share of the pressure.

Looked for after a first fit, which knows wind and scale, by signs that must agree on the size of the step:

- the level: probe airspeed over wind-corrected ground speed is lower inside the span than outside (`scale_levels`);
- the edges: a leak opens at once, and within tenths of a second a gust changes little (`reading_edges`).

Each is a measure of the same step with its own variance; they are averaged by their weights. The thresholds lie above
what any of 370 simulated sound flights showed: 5.0 deviations for one edge and 6.2 for two (5.8 and 7.3 with readings
rounded to 1 Pa).
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from service.airdata.constants import SEA_LEVEL_DENSITY_KGPM3
from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.results import AirDataSeries, Estimate, Fault, FittedPoints, Loiter
from service.reduction.faults.reading_edges import Edges, edges_of_reading, extreme_in_bins
from service.reduction.faults.scale_levels import levels_of_spans

FEWEST_POINTS = 24
ONE_EDGE = 5.8
TWO_EDGES = 7.5
"""Deviations at which a step is told: of a leak that stays, and of one that closes again, which has more ways to be."""
LEAST_LEVEL = 3.0
"""Deviations that the level alone must show."""
LARGEST_DISAGREEMENT = 16.0
"""Chi-square of level and edges about their mean."""
ONE_EDGE_ALONE = 6.5
TWO_EDGES_ALONE = 9.0
"""Deviations at which edges are told where the level cannot tell, or is uncertain: gusts make edges of 5 at most."""
CONFIRMING_SHARE = 0.25
"""Of the edge's step, that the level must then show if it can tell."""
SLOWEST_INTERVAL_S = 0.25
"""Between slower samples a manoeuvre makes an edge as well: there the level must speak."""
NARROWEST = 3
"""Points within a span that edges alone tell, and outside of it."""
LEAST_ZERO_UNCERTAINTY_PA = 1.0
"""However sure the fit is of the zero: with two airspeeds it may have taken the leak for one."""
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
    # What a wrong zero adds to the speed V: K / density times its error, over V.
    zero_pa = max(float(np.sqrt(max(fit.covariance[1, 1], 0.0))), LEAST_ZERO_UNCERTAINTY_PA)
    levels = levels_of_spans(points, fit.pressure_scale * zero_pa / SEA_LEVEL_DENSITY_KGPM3)
    delay_s = fit.gps_delay_s.value if fit.gps_delay_s is not None else 0.0
    time_s = levels.points.time_s - delay_s
    edges = _edges(series, usable, fit)
    opening, closing = _edge_measure(edges, time_s, -1.0), _edge_measure(edges, time_s, 1.0)
    found = _likeliest(*levels.between(), opening, closing, _quick(series))
    if found is None:
        return None
    start, end, step = found
    first_s, last_s = _flown(series, loiters)
    start_s = first_s if start == 0 else _time_of(opening, time_s, start)
    end_s = last_s if end == time_s.size else _time_of(closing, time_s, end)
    message = (
        f"From {start_s:.1f} s to {end_s:.1f} s the probe reads {100 * -np.expm1(2 * step):.0f} % less pressure than "
        "in the rest of the flight at the same airspeed. A leak, water or dirt in the lines is likely: test them."
    )
    return Fault(FaultKind.LEAK, "probe", start_s, end_s, message)


def _flown(series: AirDataSeries | None, loiters: tuple[Loiter, ...]) -> tuple[float, float]:
    """First and last time in the air, to which a leak reaches that neither opens nor closes in the loiters. [s]"""
    if series is None or series.on_ground.all():
        return loiters[0].start_s, loiters[-1].end_s
    flown = series.time_s[~series.on_ground]
    return float(flown[0]), float(flown[-1])


def _edges(series: AirDataSeries | None, usable: BoolArray | None, fit: Fitted) -> Edges:
    if series is None:
        return Edges(np.empty(0), np.empty(0), np.empty(0))
    chosen = np.isfinite(series.reading_pa) & ~series.on_ground
    if usable is not None:
        chosen &= usable
    return edges_of_reading(series.time_s[chosen], series.reading_pa[chosen] - fit.zero_offset_pa)


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


def _likeliest(
    level: FloatArray, variance: FloatArray, opening: _Measure, closing: _Measure, quick: bool
) -> tuple[int, int, float] | None:
    """Boundaries and size of the most significant step down, if it is significant; `quick` edges may speak alone."""
    edges = ((opening.value[:, None], opening.weight[:, None]), (closing.value[None, :], closing.weight[None, :]))
    mean, weight, disagreement = _average((level, 1.0 / variance), *edges)
    agreed = (disagreement < LARGEST_DISAGREEMENT) & (mean < -LEAST_STEP)
    agreed &= level < -LEAST_LEVEL * np.sqrt(np.where(np.isfinite(variance), variance, 0.0))
    excess = np.where(agreed, -mean * np.sqrt(weight), 0.0) / _threshold(level.shape, ONE_EDGE, TWO_EDGES)
    if quick:
        edge, edge_weight, _ = _average(*edges)
        confirmed = ~np.isfinite(variance) | (level < CONFIRMING_SHARE * edge)
        alone = confirmed & (edge < -LEAST_STEP) & _wide(level.shape)
        edge_excess = np.where(alone, -edge * np.sqrt(edge_weight), 0.0)
        edge_excess /= _threshold(level.shape, ONE_EDGE_ALONE, TWO_EDGES_ALONE)
        mean = np.where(edge_excess > excess, edge, mean)
        excess = np.maximum(excess, edge_excess)
    start, end = np.unravel_index(int(np.argmax(excess)), excess.shape)
    return (int(start), int(end), float(mean[start, end])) if excess[start, end] >= 1.0 else None


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

"""Edges of the reading: steps of the airspeed within tenths of a second, where gusts change little."""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import median_filter

from service.domain.arrays import FloatArray, IntArray
from service.reduction.faults.held_values import rounding_step

SIDES = (1, 2, 3, 5)
"""Samples averaged on either side of an edge; the number that scatters least is taken."""
FEWEST_PER_SIDE = 50
SCATTER_WINDOW_S, TREND_S = 30.0, 3.0
LONGEST_WINDOW = 601
DEVIATION_TO_SIGMA = 1.4826
TAIL_SIGMAS = 1.96
"""That 5 % of a normal variable passes."""
LEAST_DEVIATION = 1e-4
LARGEST_STRETCH = 1.5
"""An edge across a gap in time is none."""
LEAST_SPEED_SHARE = 0.05
"""Readings that give less than this share of the usual airspeed have no logarithm worth looking at."""


@dataclass(frozen=True, slots=True)
class Edges:
    """Between samples, each array (m,)."""

    time_s: FloatArray
    step: FloatArray
    """Of the logarithm of the airspeed."""
    deviation: FloatArray
    """Standard deviation of such steps by gusts and noise, there."""


def edges_of_reading(time_s: FloatArray, pressure_pa: FloatArray) -> Edges:
    """Edges of (n,) readings above zero, all usable, in flight; none where there are too few."""
    if time_s.size < FEWEST_PER_SIDE:
        return Edges(np.empty(0), np.empty(0), np.empty(0))
    log_speed = 0.5 * np.log(np.maximum(pressure_pa, LEAST_SPEED_SHARE**2 * np.median(np.abs(pressure_pa)) + 1e-9))
    # One step of rounding is no edge.
    rounding = 0.25 * rounding_step(pressure_pa) / max(float(np.median(np.abs(pressure_pa))), 1e-9)
    least = max(rounding, LEAST_DEVIATION)
    candidates = [_edges(time_s, log_speed, side, least) for side in SIDES if time_s.size >= FEWEST_PER_SIDE * side]
    return min(candidates, key=lambda edges: float(np.median(np.abs(edges.step))) if edges.step.size else np.inf)


def _edges(time_s: FloatArray, log_speed: FloatArray, side: int, least: float) -> Edges:
    total = np.concatenate([[0.0], np.cumsum(log_speed)])
    mean = (total[side:] - total[:-side]) / side
    rise = mean[side:] - mean[:-side]
    middle = 0.5 * (time_s[side : time_s.size - side + 1] + time_s[side - 1 : time_s.size - side])
    interval_s = float(np.median(np.diff(time_s)))
    # A manoeuvre goes on for seconds, a step stands alone.
    trend_width = min(max(round(TREND_S / interval_s), 4 * side + 1) | 1, LONGEST_WINDOW)
    step = rise - median_filter(rise, min(trend_width, rise.size), mode="nearest")
    stretch = time_s[2 * side - 1 :] - time_s[: time_s.size - 2 * side + 1]
    whole = stretch <= LARGEST_STRETCH * max(2 * side - 1, 1) * interval_s
    size = np.abs(step)
    usual = max(DEVIATION_TO_SIGMA * float(np.median(size)), float(np.quantile(size, 0.95)) / TAIL_SIGMAS)
    width = min(max(round(SCATTER_WINDOW_S / interval_s), 3) | 1, LONGEST_WINDOW)
    local = DEVIATION_TO_SIGMA * median_filter(size, min(width, size.size), mode="nearest")
    return Edges(middle[whole], step[whole], np.maximum(local, max(usual, least))[whole])


def extreme_in_bins(edges: Edges, bins: IntArray, count: int, sign: float) -> IntArray:
    """(count,) index of the edge whose sign times step, in deviations, is largest in each bin; -1 in an empty one."""
    best = np.full(count, -1, dtype=np.int64)
    order = np.argsort(sign * edges.step / edges.deviation)
    best[bins[order]] = order
    return best

"""GPS delay before the fit: from the heading where attitude was recorded, else a prior.

In a turn of rate w a velocity that is tau late points tau * w behind the heading; turns both ways tell that lag from a
compass error. Without attitude the delay hardly shows in a loiter, and hardly matters.
"""

from dataclasses import dataclass

import numpy as np

from service.domain.arrays import FloatArray, IntArray
from service.domain.log import AttitudeSamples

PRIOR_S = 0.25
PRIOR_UNCERTAINTY_S = 0.13
"""0.05 to 0.5 s late (common practice)."""
STEADY_SLIP_RAD = 0.015
"""Sideslip that a steady turn may keep, always to the same side of the turn: it looks like a delay."""
STEEPEST_PITCH_DEG = 60.0
"""Beyond it the yaw angle is ill defined (an aircraft that sits on its tail)."""
FEWEST_PIECES = 4
LEAST_RATE_SPREAD_RAD_PER_S = 0.05


@dataclass(frozen=True, slots=True)
class GpsDelay:
    """Delay and its standard uncertainty. [s]"""

    value_s: float
    standard_uncertainty_s: float


def prior_delay() -> GpsDelay:
    return GpsDelay(PRIOR_S, PRIOR_UNCERTAINTY_S)


def delay_from_heading(
    gps_time_s: FloatArray, air_heading_rad: FloatArray, piece: IntArray, attitude: AttitudeSamples | None
) -> GpsDelay:
    """Delay from yaw against the direction of the air velocity, joined with the prior; the prior where none tells.

    Parameters
    ----------
    gps_time_s, air_heading_rad : (m,) GPS times in the loiters and the direction of ground velocity less wind there.
    piece : (m,) number of the turn (or other stretch of some turn's length) each sample belongs to.
    """
    if attitude is None or gps_time_s.size == 0:
        return prior_delay()
    known = np.isfinite(attitude.yaw_deg) & np.isfinite(attitude.pitch_deg)
    if known.sum() < 10 or float(np.median(np.abs(attitude.pitch_deg[known]))) > STEEPEST_PITCH_DEG:
        return prior_delay()
    yaw = np.unwrap(np.radians(attitude.yaw_deg[known]))
    time_s = attitude.time_s[known]
    inside = (gps_time_s >= time_s[0]) & (gps_time_s <= time_s[-1])
    behind = np.angle(np.exp(1j * (air_heading_rad - np.interp(gps_time_s, time_s, yaw))))
    rate = (np.interp(gps_time_s + 1, time_s, yaw) - np.interp(gps_time_s - 1, time_s, yaw)) / 2
    numbers, place = np.unique(piece[inside], return_inverse=True)
    if numbers.size < FEWEST_PIECES:
        return prior_delay()
    count = np.bincount(place)
    mean_rate = np.bincount(place, weights=rate[inside]) / count
    lag = np.bincount(place, weights=behind[inside]) / count
    return _regressed(mean_rate, lag)


def _regressed(rate: FloatArray, lag: FloatArray) -> GpsDelay:
    """Slope of lag against minus rate over turns, with the compass error as intercept."""
    spread = rate - rate.mean()
    if float(np.sqrt(np.mean(spread**2))) < LEAST_RATE_SPREAD_RAD_PER_S:
        return prior_delay()
    slope = -float(spread @ lag) / float(spread @ spread)
    scatter = lag - lag.mean() + slope * spread
    variance = float(scatter @ scatter) / max(rate.size - 2, 1) / float(spread @ spread)
    variance += (STEADY_SLIP_RAD / float(np.sqrt(np.mean(rate**2)))) ** 2
    weight = PRIOR_UNCERTAINTY_S**2 / (PRIOR_UNCERTAINTY_S**2 + variance)
    value = weight * slope + (1 - weight) * PRIOR_S
    return GpsDelay(float(value), float(np.sqrt(weight * variance)))

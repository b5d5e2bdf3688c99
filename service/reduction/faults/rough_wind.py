"""Airspeed by GPS before any fit, to a metre per second or two: enough to know whether a probe reads anything at all.

The wind is the centre of the circle that the ground velocity runs round in its own plane (algebraic least squares,
Kasa 1976), one per window; a window whose headings do not go round tells none.
"""

import numpy as np

from service.airdata.headings import heading_coverage
from service.airdata.wind_triangle import direction_from_components
from service.domain.arrays import FloatArray, IntArray
from service.domain.results import AirDataSeries

WINDOW_S = 120.0
STEP_S = 30.0
FINEST_INTERVAL_S = 0.2
"""More than five velocities a second tell no more of a wind."""
ENOUGH_COVERAGE_DEG = 230.0
LARGEST_MISFIT = 0.3
"""Of the radius, root mean square: velocities that lie further off the circle tell no wind."""
SMALLEST_RADIUS_MPS = 4.0
"""Below it the circle is the scatter of gusts on a straight leg: nothing that carries a probe flies so slowly."""
FEWEST_SAMPLES = 12


def speed_through_air(series: AirDataSeries) -> tuple[FloatArray, bool]:
    """Airspeed (n,) at the probe's times [m/s], and whether a wind could be taken out of it.

    NaN without GPS; the ground speed where no window's headings go round.
    """
    time_s = series.gps_time_s
    if time_s.size < 2:
        return np.full(series.time_s.size, np.nan), False
    flown = ~series.gps_on_ground
    north, east = series.velocity_north_mps, series.velocity_east_mps
    step = max(int(FINEST_INTERVAL_S / max(float(np.median(np.diff(time_s))), 1e-3)), 1)
    middles, centres = _winds(*(values[flown][::step] for values in (time_s, north, east)))
    known = middles.size > 0
    wind_north = np.interp(time_s, middles, centres[0]) if known else np.zeros(time_s.size)
    wind_east = np.interp(time_s, middles, centres[1]) if known else np.zeros(time_s.size)
    speed = np.hypot(north - wind_north, east - wind_east)
    return np.interp(series.time_s, time_s, speed), known


def _winds(time_s: FloatArray, north: FloatArray, east: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Middles (k,) of the windows that tell a wind [s], and the winds (2, k) [m/s]."""
    if time_s.size < FEWEST_SAMPLES:
        return np.empty(0), np.empty((2, 0))
    # Only where there are samples: a hostile log may span years.
    starts = time_s[0] + STEP_S * np.unique(np.floor((time_s - time_s[0]) / STEP_S))
    middles, centres = _winds_of_windows(time_s, north, east, starts, starts + WINDOW_S)
    if middles.size:
        return middles, centres
    # A box or a slow circle goes round in no single window, but the whole flight may.
    return _winds_of_windows(time_s, north, east, time_s[:1], time_s[-1:] + STEP_S)


def _winds_of_windows(
    time_s: FloatArray, north: FloatArray, east: FloatArray, start_s: FloatArray, end_s: FloatArray
) -> tuple[FloatArray, FloatArray]:
    low, high = np.searchsorted(time_s, start_s), np.searchsorted(time_s, end_s)
    centres, radius, misfit = _circles(north, east, low, high)
    told = (high - low >= FEWEST_SAMPLES) & (misfit < LARGEST_MISFIT * radius) & (radius > SMALLEST_RADIUS_MPS)
    for index in np.flatnonzero(told):
        window = slice(low[index], high[index])
        heading = direction_from_components(north[window] - centres[0, index], east[window] - centres[1, index])
        told[index] = heading_coverage(heading) >= ENOUGH_COVERAGE_DEG
    return (0.5 * (time_s[np.minimum(low, time_s.size - 1)] + time_s[np.maximum(high - 1, 0)]))[told], centres[:, told]


def _circles(
    north: FloatArray, east: FloatArray, low: IntArray, high: IntArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Centres (2, k), radii (k,) and rms misfits (k,) of the circles through the samples of each window [m/s]."""
    square = north**2 + east**2
    terms = np.vstack(
        [
            np.ones_like(north),
            north,
            east,
            north**2,
            east**2,
            north * east,
            square,
            square * north,
            square * east,
            square**2,
        ]
    )
    sums = np.concatenate([np.zeros((terms.shape[0], 1)), np.cumsum(terms, axis=1)], axis=1)
    count, n, e, nn, ee, ne, s, sn, se, ss = sums[:, high] - sums[:, low]
    count = np.maximum(count, 1.0)
    # Deviations from the window's mean: the normal equations are then two by two.
    cnn, cee, cne = nn - n * n / count, ee - e * e / count, ne - n * e / count
    csn, cse = 0.5 * (sn - s * n / count), 0.5 * (se - s * e / count)
    determinant = cnn * cee - cne**2
    usable = determinant > 1e-9 * np.maximum(cnn * cee, 1e-12)
    divisor = np.where(usable, determinant, 1.0)
    centre = np.vstack([(csn * cee - cse * cne) / divisor, (cse * cnn - csn * cne) / divisor])
    # |v - c|^2 has mean r^2; its scatter over 2 r is the misfit of the radius.
    a, b = centre
    mean = (s - 2 * a * n - 2 * b * e) / count + a * a + b * b
    second = (ss + 4 * a * a * nn + 4 * b * b * ee + 8 * a * b * ne - 4 * a * sn - 4 * b * se) / count
    scatter = np.sqrt(np.maximum(second - (mean - a * a - b * b) ** 2, 0.0))
    radius = np.sqrt(np.maximum(mean, 1e-12))
    return centre, radius, np.where(usable, scatter / (2 * radius), np.inf)

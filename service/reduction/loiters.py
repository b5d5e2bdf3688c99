"""Loiters: spans whose air headings go round, found in the plane of the ground velocity (v_north, v_east).

There the velocity vector runs round a circle whose centre is the wind and whose radius is the airspeed, so a wind
stronger than the airspeed hides nothing. The winding is counted about an estimate of the centre (algebraic circle fit,
Kasa 1976); any centre inside the circle counts the same turns. Where no circles are flown, all the time in the air
serves as a pattern of legs: whether its headings suffice is for the verdict, not for the shape.
"""

from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np

from service.airdata.headings import heading_coverage
from service.domain.arrays import FloatArray
from service.domain.codes import Direction
from service.domain.results import AirDataSeries, Loiter
from service.domain.settings import Window
from service.domain.spans import runs

SMOOTHING_S = 2.0
FINEST_INTERVAL_S = 0.2
SHORTEST_LOITER_TURN_DEG = 350.0
SLOWEST_TURN_DEG_PER_S = 0.8
"""A circle of 450 s: slower ones are told from a wandering straight leg only by luck."""
REVERSAL_DEG = 40.0
"""A swing back by this much ends a winding: gusts do not turn the air velocity so far."""
LEG_SHARE = 0.3
"""A stretch that turns slower than this share of the loiter's median rate is a leg between loiters."""
SHORTEST_LEG_S = 10.0
LONGEST_LOITER_S = 420.0
"""Longer ones are cut into equal parts: one wind holds for minutes, not for an hour."""
LONGEST_PATTERN_S = 900.0
CENTRE_WINDOW_S = 240.0
LARGEST_GAP_S = 5.0
ENOUGH_COVERAGE_DEG = 230.0
MOST_FOR_CENTRE = 2500
"""Velocities that one centre is found from: smoothed over two seconds, more of them tell nothing new."""
CLEAR_CIRCLE_FACTOR = 3.5
"""Radius over median misfit below which velocities lie on no circle: a normal cloud shows 2 to 3."""
SLOWEST_AIRSPEED_MPS = 4.0
"""A smaller circle is the gusts of a straight leg: nothing that carries an airspeed probe flies slower."""


def find_loiters(series: AirDataSeries, windows: Sequence[Window] = ()) -> tuple[Loiter, ...]:
    """Loiters in time order: the given windows, else the circles flown, else patterns of legs.

    `used` is True for all that serve; `true_airspeed_mps` is the radius in the velocity plane until a fit says better.
    """
    if (~series.gps_on_ground).sum() < 8:
        return ()
    time_s, heading, speed = _headings(series)
    if windows:
        spans = [(w.start_s, w.end_s) for w in windows]
        return tuple(filter(None, (_loiter(time_s, heading, speed, start, end) for start, end in spans)))
    found = [_loiter(time_s, heading, speed, start, end) for start, end in _circles(time_s, heading)]
    circles = [loiter for loiter in found if loiter is not None]
    if _coverage_within(time_s, heading, circles) >= ENOUGH_COVERAGE_DEG:
        return tuple(circles)
    patterns = [_loiter(time_s, heading, speed, start, end) for start, end in _patterns(time_s)]
    return tuple(replace(p, direction=Direction.STRAIGHT) for p in patterns if p is not None)


def joint_coverage(series: AirDataSeries, loiters: Sequence[Loiter]) -> float:
    """Heading coverage of all the loiters together, from the smoothed velocities alone. [deg]"""
    if (~series.gps_on_ground).sum() < 8:
        return 0.0
    time_s, heading, _ = _headings(series)
    return _coverage_within(time_s, heading, loiters)


def _headings(series: AirDataSeries) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Times in the air, and there unwrapped headings of the air velocity [deg] and airspeeds [m/s]."""
    airborne = ~series.gps_on_ground
    time_s = series.gps_time_s[airborne]
    north = _smoothed(time_s, series.velocity_north_mps[airborne])
    east = _smoothed(time_s, series.velocity_east_mps[airborne])
    # smoothed over two seconds, more than five velocities a second tell nothing new
    step = max(int(FINEST_INTERVAL_S / max(float(np.median(np.diff(time_s))), 1e-3)), 1)
    time_s, north, east = time_s[::step], north[::step], east[::step]
    centre = _centre_in_time(time_s, north, east)
    heading = np.degrees(np.unwrap(np.arctan2(east - centre[1], north - centre[0])))
    return time_s, heading, np.hypot(east - centre[1], north - centre[0])


def _coverage_within(time_s: FloatArray, heading: FloatArray, loiters: Sequence[Loiter]) -> float:
    inside = np.zeros(time_s.size, dtype=bool)
    for loiter in loiters:
        inside |= (time_s >= loiter.start_s) & (time_s <= loiter.end_s)
    return heading_coverage(heading[inside])


def _smoothed(time_s: FloatArray, values: FloatArray) -> FloatArray:
    """Running mean over SMOOTHING_S (in samples of the median interval)."""
    width = round(SMOOTHING_S / max(float(np.median(np.diff(time_s))), 1e-3)) | 1
    if width < 3 or values.size < width:
        return values
    padded = np.pad(values, width // 2, mode="edge")
    total = np.concatenate([[0.0], np.cumsum(padded)])
    return np.asarray((total[width:] - total[:-width]) / width)


def _circle_centre(north: FloatArray, east: FloatArray) -> tuple[float, float]:
    """Centre of the circle through (n,) velocities: algebraic least squares, trimmed three times of its outliers."""
    step = max(1, north.size // MOST_FOR_CENTRE)
    north, east = north[::step], east[::step]
    keep = np.ones(north.size, dtype=bool)
    centre = (0.0, 0.0)
    for _ in range(4):
        design = np.column_stack([2 * north[keep], 2 * east[keep], np.ones(int(keep.sum()))])
        solution = np.linalg.lstsq(design, north[keep] ** 2 + east[keep] ** 2, rcond=None)[0]
        centre = (float(solution[0]), float(solution[1]))
        misfit = np.hypot(north - centre[0], east - centre[1])
        off = np.abs(misfit - np.median(misfit[keep]))
        keep = off <= max(4 * float(np.median(off[keep])), 0.5)
        if keep.sum() < 8:
            break
    radius = float(np.median(np.hypot(north - centre[0], east - centre[1])))
    wander = float(np.median(np.abs(np.hypot(north - centre[0], east - centre[1]) - radius)))
    # a cloud about one velocity (a straight leg) has no centre: its headings are those over ground
    clear = radius > max(CLEAR_CIRCLE_FACTOR * wander, SLOWEST_AIRSPEED_MPS)
    return centre if clear else (0.0, 0.0)


def _centre_in_time(time_s: FloatArray, north: FloatArray, east: FloatArray) -> FloatArray:
    """(2, n) centre of the velocity circle: of the window about each time where its headings go round, else of all."""
    overall = _circle_centre(north, east)
    starts = np.arange(time_s[0], time_s[-1], CENTRE_WINDOW_S / 2)
    middles, centres = [], []
    for start in starts:
        low, high = np.searchsorted(time_s, [start, start + CENTRE_WINDOW_S])
        if high - low < 16:
            continue
        local = _circle_centre(north[low:high], east[low:high])
        if heading_coverage(np.degrees(np.arctan2(east[low:high] - local[1], north[low:high] - local[0]))) > 270.0:
            middles.append(start + CENTRE_WINDOW_S / 2)
            centres.append(local)
    if not centres:
        return np.repeat(np.array(overall)[:, None], time_s.size, axis=1)
    table = np.array(centres)
    return np.vstack([np.interp(time_s, middles, table[:, k]) for k in (0, 1)])


def _windings(heading: FloatArray) -> list[tuple[int, int]]:
    """Index spans between turning points of the unwrapped heading, swings below REVERSAL_DEG ignored."""
    pivots, extreme, sign = [0], 0, 0
    for index, value in enumerate(heading.tolist()):
        step = value - heading[extreme]
        if sign == 0:
            if abs(step) > REVERSAL_DEG:
                sign, extreme = (1 if step > 0 else -1), index
        elif step * sign >= 0:
            extreme = index
        elif -step * sign > REVERSAL_DEG:
            pivots.append(extreme)
            sign, extreme = -sign, index
    pivots.append(heading.size - 1)
    return list(pairwise(pivots))


def _circles(time_s: FloatArray, heading: FloatArray) -> list[tuple[float, float]]:
    spans = []
    for first, last in _windings(heading):
        if abs(heading[last] - heading[first]) < SHORTEST_LOITER_TURN_DEG:
            continue
        for start, end in _without_legs(time_s[first : last + 1], heading[first : last + 1]):
            inside = slice(first + start, first + end)
            turned = abs(heading[inside][-1] - heading[inside][0])
            lasted = time_s[inside][-1] - time_s[inside][0]
            if turned >= SHORTEST_LOITER_TURN_DEG and turned / lasted >= SLOWEST_TURN_DEG_PER_S:
                spans.extend(_parts(time_s[inside][0], time_s[inside][-1], LONGEST_LOITER_S))
    return spans


def _without_legs(time_s: FloatArray, heading: FloatArray) -> list[tuple[int, int]]:
    """Index spans of a winding that really turn: straight stretches and gaps in time are cut out."""
    half = 2.5
    ahead = np.interp(time_s + half, time_s, heading) - np.interp(time_s - half, time_s, heading)
    span = np.minimum(time_s + half, time_s[-1]) - np.maximum(time_s - half, time_s[0])
    rate = np.abs(ahead) / np.maximum(span, 1e-3)
    typical = float(np.median(rate[rate > SLOWEST_TURN_DEG_PER_S])) if (rate > SLOWEST_TURN_DEG_PER_S).any() else 0.0
    slow = rate < LEG_SHARE * typical
    turning = np.ones(time_s.size, dtype=bool)
    for first, last in runs(slow):
        if time_s[last - 1] - time_s[first] >= SHORTEST_LEG_S or first == 0 or last == time_s.size:
            turning[first:last] = False
    turning[1:][np.diff(time_s) > LARGEST_GAP_S] = False
    return [(first, last) for first, last in runs(turning) if last - first >= 8]


def _parts(start_s: float, end_s: float, longest_s: float) -> list[tuple[float, float]]:
    edges = np.linspace(start_s, end_s, int(np.ceil(max(end_s - start_s, 1e-9) / longest_s)) + 1)
    return list(zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True))


def _patterns(time_s: FloatArray) -> list[tuple[float, float]]:
    """All time in the air, cut at gaps and into parts of LONGEST_PATTERN_S."""
    joined = np.concatenate([[False], np.diff(time_s) <= LARGEST_GAP_S])
    breaks = [0, *(1 + np.flatnonzero(~joined[1:])).tolist(), time_s.size]
    spans = []
    for first, last in pairwise(breaks):
        if last - first >= 8:
            spans.extend(_parts(time_s[first], time_s[last - 1], LONGEST_PATTERN_S))
    return spans


def _loiter(time_s: FloatArray, heading: FloatArray, speed: FloatArray, start_s: float, end_s: float) -> Loiter | None:
    inside = (time_s >= start_s) & (time_s <= end_s)
    if inside.sum() < 4:
        return None
    angle = heading[inside]
    turned = float(angle[-1] - angle[0])
    direction = Direction.STRAIGHT
    if abs(turned) >= SHORTEST_LOITER_TURN_DEG:
        direction = Direction.RIGHT if turned > 0 else Direction.LEFT
    return Loiter(
        start_s=float(start_s),
        end_s=float(end_s),
        turns=abs(turned) / 360.0,
        direction=direction,
        heading_coverage_deg=heading_coverage(angle),
        true_airspeed_mps=float(np.median(speed[inside])),
        used=True,
    )

"""When the aircraft stood on the ground: for the zero offset, for the silence of warnings, and to keep it out of fits.

Rest is judged by GPS speed at the start or the end of the log, or by the recorder's own ground contact; rolling lasts
from rest until the aircraft has climbed off its resting height. An aircraft that hangs in a strong headwind has no
ground speed either: rest must therefore touch an end of the log, or last long at an unmoving height.
"""

from dataclasses import dataclass

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.log import DecodedLog, GpsSamples
from service.domain.spans import runs, within

REST_SPEED_MPS = 1.0
"""Ground speed under which the aircraft may be at rest: above GPS noise, below a walk."""
SHORTEST_REST_S = 3.0
LONG_REST_S = 10.0
"""A rest that touches no end of the log must last this long."""
LIFT_OFF_M = 2.0
"""Height above the resting height at which the aircraft counts as airborne."""
LIFT_OFF_SPEED_MPS = 6.0
"""Ground speed that ends rolling where no height is known."""
LONGEST_ROLL_S = 180.0
"""Taxi, roll and wait on the ground: minutes, where the height does not rise."""
STILL_HEIGHT_M = 1.5
EDGE_S = 1.0
"""Cut from either end of a rest: it is found by a smoothed speed."""


@dataclass(frozen=True, slots=True)
class GroundPhases:
    """Spans (k, 2) of start and end in s: standing still, and all time on the ground (still or rolling)."""

    rest_s: FloatArray
    ground_s: FloatArray


def find_ground_phases(log: DecodedLog) -> GroundPhases:
    """Rest and ground spans of a log; none where nothing tells."""
    gps = log.gps
    if gps is None or gps.time_s.size < 3:
        return GroundPhases(np.empty((0, 2)), np.empty((0, 2)))
    time_s, speed_mps, height_m = _speed_and_height(log, gps)
    if time_s.size < 3:
        return GroundPhases(np.empty((0, 2)), np.empty((0, 2)))
    if log.ground_contact is not None and log.ground_contact.time_s.size:
        ground = _contact_spans(log, time_s)
        contact = within(time_s, ground)
        return GroundPhases(_rest_spans(time_s, speed_mps, height_m, contact), ground)
    rest = _rest_spans(time_s, speed_mps, height_m, None)
    ground = np.array([_with_rolling(span, time_s, speed_mps, height_m) for span in rest]).reshape(-1, 2)
    return GroundPhases(rest, ground)


def _speed_and_height(log: DecodedLog, gps: GpsSamples) -> tuple[FloatArray, FloatArray, FloatArray]:
    """GPS times with a fix, ground speed there (median of five), height (static pressure's, else GPS's, else NaN)."""
    valid = np.isfinite(gps.velocity_north_mps) & np.isfinite(gps.velocity_east_mps)
    time_s = gps.time_s[valid]
    speed = np.hypot(gps.velocity_north_mps[valid], gps.velocity_east_mps[valid])
    if time_s.size >= 5:
        windows = np.lib.stride_tricks.sliding_window_view(np.pad(speed, 2, mode="edge"), 5)
        speed = np.median(windows, axis=1)
    height = np.full(time_s.size, np.nan)
    if time_s.size == 0:
        return time_s, speed, height
    if log.static is not None and np.isfinite(log.static.static_pressure_pa).sum() > 2:
        known = np.isfinite(log.static.static_pressure_pa)
        pressure = np.interp(time_s, log.static.time_s[known], log.static.static_pressure_pa[known])
        # 8.4 km is the scale height of the lower atmosphere: only differences of height matter here.
        height = -8400.0 * np.log(pressure / pressure[0])
    elif gps.altitude_m is not None:
        height = gps.altitude_m[valid]
    return time_s, speed, height


def _contact_spans(log: DecodedLog, time_s: FloatArray) -> FloatArray:
    contact = log.ground_contact
    assert contact is not None
    spans = []
    for first, last in runs(contact.on_ground):
        end = contact.time_s[last] if last < contact.time_s.size else max(time_s[-1], contact.time_s[-1])
        # Before its first message the recorder's state is what that message says.
        start = min(contact.time_s[first], time_s[0]) if first == 0 else contact.time_s[first]
        spans.append((start, end))
    return np.array(spans).reshape(-1, 2)


def _rest_spans(
    time_s: FloatArray, speed_mps: FloatArray, height_m: FloatArray, contact: BoolArray | None
) -> FloatArray:
    slow = speed_mps < REST_SPEED_MPS
    if contact is not None:
        slow &= contact
    spans = []
    for first, last in runs(slow):
        start, end = time_s[first], time_s[last - 1]
        at_end_of_log = first == 0 or last == time_s.size
        heights = height_m[first:last]
        known = heights[np.isfinite(heights)]
        still = known.size < 2 or float(np.std(known)) < STILL_HEIGHT_M
        if contact is None and not at_end_of_log and not (still and known.size and end - start >= LONG_REST_S):
            continue
        if not still or end - start < SHORTEST_REST_S:
            continue
        spans.append((start if first == 0 else start + EDGE_S, end if last == time_s.size else end - EDGE_S))
    return np.array(spans).reshape(-1, 2)


def _with_rolling(
    span: FloatArray, time_s: FloatArray, speed_mps: FloatArray, height_m: FloatArray
) -> tuple[float, float]:
    """The rest span widened by the roll before and after it."""
    start, end = float(span[0]), float(span[1])
    inside = (time_s >= start) & (time_s <= end) & np.isfinite(height_m)
    resting_height = float(np.median(height_m[inside])) if inside.any() else np.nan
    airborne = height_m > resting_height + LIFT_OFF_M if np.isfinite(resting_height) else speed_mps > LIFT_OFF_SPEED_MPS
    after = np.flatnonzero(airborne & (time_s > end))
    before = np.flatnonzero(airborne & (time_s < start))
    last_ground = time_s[after[0]] if after.size else time_s[-1]
    first_ground = time_s[before[-1]] if before.size else time_s[0]
    return max(first_ground, start - LONGEST_ROLL_S), min(last_ground, end + LONGEST_ROLL_S)

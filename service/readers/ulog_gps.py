"""GPS of a log file: what counts as a valid velocity, and the date that the satellites tell."""

from datetime import UTC, datetime, timedelta

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.log import GpsSamples
from service.readers.plausible import cleaned, possible
from service.readers.ulog_choice import Rating
from service.readers.ulog_recording import Recording, since

LOWEST_FIX = 3
"""Kind of fix from which on a velocity is one in space."""
LARGEST_HORIZONTAL_UNCERTAINTY_M = 50.0
"""A receiver that claims a fix with a worse position has none yet (1400 m has been met)."""
EARLIEST_UTC_S, LATEST_UTC_S = 946684800.0, 4102444800.0
"""2000-01-01 and 2100-01-01: dates outside are a receiver without the time."""

_VELOCITIES = ("velocity_north_mps", "velocity_east_mps")


def rate_gps(recording: Recording) -> Rating:
    """Judge a receiver by its samples with a valid velocity."""
    usable = int(np.count_nonzero(valid_fix(recording)))
    return Rating(usable, () if usable else ("no sample with a valid fix",))


def valid_fix(recording: Recording) -> BoolArray:
    """(n,) whether each sample holds a velocity that can be trusted."""
    valid = np.ones(recording.time_s.size, dtype=np.bool_)
    for name in _VELOCITIES:
        valid &= possible(name, recording.values(name)) if name in recording else False
    if "fix" in recording:
        valid &= recording.values("fix") >= LOWEST_FIX
    if "horizontal_uncertainty_m" in recording:
        # not stated (NaN) is not bad
        valid &= ~(recording.values("horizontal_uncertainty_m") > LARGEST_HORIZONTAL_UNCERTAINTY_M)
    if "velocity_valid" in recording:
        valid &= recording.values("velocity_valid") != 0.0
    return valid


def gps_samples(recording: Recording, source: str, zero_s: float) -> GpsSamples:
    """The stream, NaN wherever there is no valid fix."""
    valid = valid_fix(recording)

    def column(name: str) -> FloatArray | None:
        if name not in recording:
            return None
        return np.where(valid, cleaned(name, recording.values(name)), np.nan)

    missing = np.full(recording.time_s.size, np.nan)
    north, east = (column(name) for name in _VELOCITIES)
    return GpsSamples(
        time_s=since(zero_s, recording.time_s),
        velocity_north_mps=missing if north is None else north,
        velocity_east_mps=missing if east is None else east,
        velocity_down_mps=column("velocity_down_mps"),
        latitude_deg=column("latitude_deg"),
        longitude_deg=column("longitude_deg"),
        altitude_m=column("altitude_m"),
        speed_uncertainty_mps=column("speed_uncertainty_mps"),
        source=source,
    )


def start_utc(recording: Recording, zero_s: float) -> datetime | None:
    """The instant of `zero_s` on the recorder's clock, by the median over samples with a fix; None without one."""
    if "utc_s" not in recording:
        return None
    utc_s = recording.values("utc_s")
    known = valid_fix(recording) & (utc_s > EARLIEST_UTC_S) & (utc_s < LATEST_UTC_S)
    if not known.any():
        return None
    at_zero_s = float(np.median(utc_s[known] - since(zero_s, recording.time_s[known])))
    return datetime.fromtimestamp(0, UTC) + timedelta(microseconds=round(at_zero_s * 1e6))


def ground_speed(gps: GpsSamples, at_s: FloatArray) -> FloatArray:
    """Horizontal speed at other times, linear between valid samples; zeros without any. (n,) [m/s]"""
    speed = np.hypot(gps.velocity_north_mps, gps.velocity_east_mps)
    known = np.isfinite(speed)
    return np.interp(at_s, gps.time_s[known], speed[known]) if known.any() else np.zeros(at_s.size)


def moving_fast(gps: GpsSamples | None, at_s: FloatArray) -> BoolArray:
    """(n,) in forward flight: faster than 5 m/s and than half of what the flight reached."""
    if gps is None:
        return np.zeros(at_s.size, dtype=np.bool_)
    speed = ground_speed(gps, at_s)
    return speed > max(5.0, 0.5 * float(np.quantile(speed, 0.95))) if speed.size else speed > 0.0

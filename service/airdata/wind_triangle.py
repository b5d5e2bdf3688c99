"""The wind triangle: ground velocity = air velocity + wind.

Velocities are components north and east (down where it is given); **wind is the velocity of the air mass**, the way it
blows towards, and `from` directions are the opposite. Directions are degrees clockwise from true north, 0 <= d < 360
on return, any finite angle on entry. NaN stays NaN. Numbers or arrays that broadcast, as numpy's own ufuncs take them;
the answer is float64.
"""

import numpy as np
from numpy.typing import ArrayLike

from service.domain.arrays import FloatArray

# numbers too large to add or multiply are no cause to warn: the answer is infinite or NaN
_quiet = np.errstate(over="ignore", invalid="ignore")


@_quiet
def components_from_direction(speed_mps: ArrayLike, direction_deg: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """North and east components [m/s] of a speed [m/s] **towards** a direction (heading, track). [deg]"""
    speed = np.asarray(speed_mps, dtype=np.float64)
    angle = np.deg2rad(_finite(direction_deg))
    return speed * np.cos(angle), speed * np.sin(angle)


@_quiet
def direction_from_components(north_mps: ArrayLike, east_mps: ArrayLike) -> FloatArray:
    """Direction **towards** which a velocity points: heading of an air velocity, track of a ground velocity. [deg]

    NaN for a velocity of zero, which points nowhere.

    Parameters
    ----------
    north_mps, east_mps : (n,) float [m/s].
    """
    north, east = np.asarray(north_mps, dtype=np.float64), np.asarray(east_mps, dtype=np.float64)
    degrees = np.mod(np.rad2deg(np.arctan2(east, north)), 360.0)
    # the remainder of a tiny negative angle rounds up to 360 itself
    degrees = np.where(degrees >= 360.0, 0.0, degrees)
    return np.where((north == 0.0) & (east == 0.0), np.nan, degrees)


@_quiet
def speed_from_components(north_mps: ArrayLike, east_mps: ArrayLike, down_mps: ArrayLike = 0.0) -> FloatArray:
    """Magnitude of a velocity. [m/s]

    Parameters
    ----------
    north_mps, east_mps, down_mps : (n,) float [m/s].
    """
    horizontal = np.hypot(np.asarray(north_mps, dtype=np.float64), np.asarray(east_mps, dtype=np.float64))
    return np.hypot(horizontal, np.asarray(down_mps, dtype=np.float64))


@_quiet
def wind_components_from_direction(
    wind_speed_mps: ArrayLike, wind_from_deg: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """North and east velocity [m/s] of air that comes **from** a direction [deg] at a speed [m/s]."""
    north, east = components_from_direction(wind_speed_mps, wind_from_deg)
    return -north, -east


@_quiet
def wind_from_direction(wind_north_mps: ArrayLike, wind_east_mps: ArrayLike) -> FloatArray:
    """Direction **from** which the wind blows. [deg] NaN in calm air.

    Parameters
    ----------
    wind_north_mps, wind_east_mps : (n,) float, velocity of the air mass. [m/s]
    """
    return direction_from_components(
        np.negative(np.asarray(wind_north_mps, dtype=np.float64)),
        np.negative(np.asarray(wind_east_mps, dtype=np.float64)),
    )


@_quiet
def ground_velocity_from_heading(
    heading_deg: ArrayLike, true_airspeed_mps: ArrayLike, wind_north_mps: ArrayLike, wind_east_mps: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Ground velocity north and east [m/s] of an aircraft that points, and flies through the air, along a heading.

    Parameters
    ----------
    heading_deg : (n,) float, of the air velocity. [deg]
    true_airspeed_mps : (n,) float, horizontal. [m/s]
    wind_north_mps, wind_east_mps : (n,) float, velocity of the air mass. [m/s]
    """
    air_north, air_east = components_from_direction(true_airspeed_mps, heading_deg)
    return (
        air_north + np.asarray(wind_north_mps, dtype=np.float64),
        air_east + np.asarray(wind_east_mps, dtype=np.float64),
    )


@_quiet
def air_velocity_from_ground_velocity(
    velocity_north_mps: ArrayLike, velocity_east_mps: ArrayLike, wind_north_mps: ArrayLike, wind_east_mps: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Velocity through the air, north and east [m/s]: ground velocity less wind, all (n,) [m/s]."""
    return (
        np.asarray(velocity_north_mps, dtype=np.float64) - np.asarray(wind_north_mps, dtype=np.float64),
        np.asarray(velocity_east_mps, dtype=np.float64) - np.asarray(wind_east_mps, dtype=np.float64),
    )


@_quiet
def ground_speed_from_track(
    track_deg: ArrayLike, true_airspeed_mps: ArrayLike, wind_north_mps: ArrayLike, wind_east_mps: ArrayLike
) -> FloatArray:
    """Ground speed [m/s] of an aircraft that holds a track over the ground, crabbing into the wind.

    NaN where the track cannot be held: the wind across it exceeds the airspeed, or the wind against it leaves no way
    forward. In wind stronger than the airspeed two speeds can answer; this is the faster.

    Parameters
    ----------
    track_deg : (n,) float, direction of the ground velocity. [deg]
    true_airspeed_mps : (n,) float, horizontal. [m/s]
    wind_north_mps, wind_east_mps : (n,) float, velocity of the air mass. [m/s]
    """
    along_north, along_east = components_from_direction(1.0, track_deg)
    wind_north, wind_east = np.asarray(wind_north_mps, dtype=np.float64), np.asarray(wind_east_mps, dtype=np.float64)
    along = wind_north * along_north + wind_east * along_east
    across = wind_east * along_north - wind_north * along_east
    airspeed = np.asarray(true_airspeed_mps, dtype=np.float64)
    able = np.where(np.abs(across) <= airspeed, airspeed, np.nan)
    ground_speed = along + np.sqrt((able - across) * (able + across))
    return np.where(ground_speed >= 0.0, ground_speed, np.nan)


def _finite(direction_deg: ArrayLike) -> FloatArray:
    values = np.asarray(direction_deg, dtype=np.float64)
    return np.where(np.isfinite(values), values, np.nan)

"""Body axes of a recorder: attitude from quaternions, and which axis the lift points along."""

from dataclasses import dataclass

import numpy as np
from scipy import constants

from service.domain.arrays import BoolArray, FloatArray

FEWEST_MOVING = 20
"""Fewer samples in motion do not tell an axis."""


@dataclass(frozen=True, slots=True)
class LiftAxis:
    """Body axis along which the wing's lift pulls in forward flight: `load factor = sign * specific force / g0`."""

    axis: int
    """0 forward (the nose of the recorder), 2 down."""
    sign: int

    @property
    def words(self) -> str:
        if self.axis == 0:
            return "along the nose axis of the recorder, which stands upright in forward flight"
        return "along the body axis normal to the wing"


CONVENTIONAL = LiftAxis(axis=2, sign=-1)
"""Lift points up, against the down axis."""


def lift_axis(specific_force_mps2: FloatArray, moving: BoolArray) -> LiftAxis:
    """Find the lift axis.

    In forward flight the specific force is on average the lift, one g or a little more, so the axis that carries it is
    the lift's, however the recorder sits: a tail-sitter flies with its body axes turned by a quarter about the pitch
    axis, its nose axis upright and its back ahead. On the ground and in hover it looks like any other aircraft, so
    only samples in fast forward motion count.

    Parameters
    ----------
    specific_force_mps2 : (n, 3) forward, right, down. [m/s2]
    moving : (n,) in fast forward motion.
    """
    flown = specific_force_mps2[moving & np.isfinite(specific_force_mps2).all(axis=1)]
    if len(flown) < FEWEST_MOVING:
        return CONVENTIONAL
    forward, _, down = np.median(flown, axis=0)
    if abs(forward) > abs(down):
        return LiftAxis(axis=0, sign=1 if forward > 0.0 else -1)
    return LiftAxis(axis=2, sign=1 if down > 0.0 else -1)


def load_factor(specific_force_mps2: FloatArray, lift: LiftAxis) -> FloatArray:
    """(n,) load factor from (n, 3) specific force [m/s2]. [1]"""
    return lift.sign * specific_force_mps2[:, lift.axis] / constants.g


def euler_angles(quaternion: FloatArray, lift: LiftAxis) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Roll, pitch and yaw of the aircraft in forward flight, each (n,). [deg]

    Parameters
    ----------
    quaternion : (n, 4) turns body axes into north, east, down; scalar first. Need not be of unit length.
    lift : with the nose axis upright the attitude is that of axes turned by a quarter about the pitch axis, so that
        roll is the bank of the wing and no angle sits at the pole.
    """
    norm = np.linalg.norm(quaternion, axis=1)
    w, x, y, z = np.where(norm > 0.0, quaternion.T / np.where(norm > 0.0, norm, 1.0), np.nan)
    if lift.axis == 0:
        w, x, y, z = _pitched_by_quarter(w, x, y, z, -lift.sign)
    roll = np.arctan2(2.0 * (w * x + y * z), 1.0 - 2.0 * (x * x + y * y))
    pitch = np.arcsin(np.clip(2.0 * (w * y - z * x), -1.0, 1.0))
    yaw = np.arctan2(2.0 * (w * z + x * y), 1.0 - 2.0 * (y * y + z * z))
    return np.degrees(roll), np.degrees(pitch), np.degrees(yaw) % 360.0


def _pitched_by_quarter(
    w: FloatArray, x: FloatArray, y: FloatArray, z: FloatArray, direction: int
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """The quaternion times a rotation of +90 or -90 degrees about its own pitch axis."""
    c, s = np.sqrt(0.5), direction * np.sqrt(0.5)
    return w * c - y * s, x * c - z * s, w * s + y * c, z * c + x * s

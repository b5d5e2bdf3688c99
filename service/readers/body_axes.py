"""Body axes of a recorder: attitude from quaternions, and which axis the lift points along."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from service.airdata.constants import STANDARD_GRAVITY_MPS2
from service.domain.arrays import FloatArray

FEWEST_MOVING = 20
"""Fewer samples in motion do not tell an axis."""
BLOCK = 1 << 16
"""Samples that are turned at a time."""


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


def lift_axis(specific_force_mps2: FloatArray) -> LiftAxis:
    """Find the lift axis.

    In forward flight the specific force is on average the lift, one g or a little more, so the axis that carries it is
    the lift's, however the recorder sits: a tail-sitter flies with its body axes turned by a quarter about the pitch
    axis, its nose axis upright and its back ahead.

    Parameters
    ----------
    specific_force_mps2 : (n, 3) forward, right, down, in fast forward motion only: on the ground and in hover a
        tail-sitter looks like any other aircraft. [m/s2]
    """
    known = specific_force_mps2[np.isfinite(specific_force_mps2).all(axis=1)]
    if len(known) < FEWEST_MOVING:
        return CONVENTIONAL
    forward, _, down = np.median(known, axis=0)
    if abs(forward) > abs(down):
        return LiftAxis(axis=0, sign=1 if forward > 0.0 else -1)
    return LiftAxis(axis=2, sign=1 if down > 0.0 else -1)


def load_factor(specific_force_mps2: FloatArray, lift: LiftAxis) -> FloatArray:
    """(n,) load factor from the specific force along the lift axis. [m/s2] -> [1]"""
    return specific_force_mps2 * (lift.sign / STANDARD_GRAVITY_MPS2)


def euler_angles(
    quaternion: Callable[[slice], Sequence[FloatArray]], size: int, lift: LiftAxis
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Roll, pitch and yaw of the aircraft in forward flight, each (n,). [deg]

    Parameters
    ----------
    quaternion : gives a part of the four arrays (n,), scalar first; turns body axes into north, east, down. Need not be
        of unit length.
    size : n.
    lift : with the nose axis upright the attitude is that of axes turned by a quarter about the pitch axis, so that
        roll is the bank of the wing and no angle sits at the pole.
    """
    roll, pitch, yaw = np.empty(size), np.empty(size), np.empty(size)
    # in blocks: the temporary arrays would weigh more than the log
    for start in range(0, size, BLOCK):
        part = slice(start, start + BLOCK)
        with np.errstate(invalid="ignore", over="ignore"):
            roll[part], pitch[part], yaw[part] = _euler_angles(quaternion(part), lift)
    return roll, pitch, yaw


def _euler_angles(quaternion: Sequence[FloatArray], lift: LiftAxis) -> tuple[FloatArray, FloatArray, FloatArray]:
    norm = np.sqrt(sum(q * q for q in quaternion))
    norm[norm == 0.0] = np.nan
    w, x, y, z = (q / norm for q in quaternion)
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

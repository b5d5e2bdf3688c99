"""A point mass that answers gusts as an aircraft does: it is pushed by the air that it measures.

The followed share of a gust is what makes traps 2 and 4 of the method notes: lift answers a vertical gust within a
second, side force and weathercock a lateral one within one to two, thrust and drag restore the airspeed within several.
Lift stays at right angles to the air velocity, so a vertical gust also tilts it forward, as in nature.
"""

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np

from service.domain.arrays import FloatArray
from tests.synthetic.air import GRAVITY

LEAST_LIFT = 0.2
MOST_LIFT = 3.0
"""Vertical lift over weight: what is left of lift in a gust, and what the wing can give."""


@dataclass(frozen=True, slots=True)
class AircraftResponse:
    """How fast the aircraft answers; the ranges are those of :func:`draw_response`."""

    speed_time_s: float
    """Airspeed restored by autopilot and drag."""
    side_time_s: float
    """Side force of sideslip carries the aircraft along with a lateral gust."""
    yaw_time_s: float
    """The fuselage turns into the air flow."""
    vertical_time_s: float
    """Lift carries the aircraft along with a vertical gust."""
    bank_time_s: float
    height_time_s: float
    """Height error over the climb that is commanded for it."""
    climb_limit_mps: float
    turning_drag_mps2: float
    """Deceleration by drag per unit of (load factor squared - 1)."""
    bank_limit_deg: float


def draw_response(
    rng: np.random.Generator, bank_limit_deg: float = 45.0, climb_limit_mps: float = 3.0
) -> AircraftResponse:
    """A small aircraft, its times drawn from the ranges written here."""
    return AircraftResponse(
        speed_time_s=rng.uniform(3.0, 8.0),
        side_time_s=rng.uniform(1.0, 2.0),
        yaw_time_s=rng.uniform(0.7, 3.0),
        vertical_time_s=rng.uniform(0.5, 1.0),
        bank_time_s=rng.uniform(0.3, 0.7),
        height_time_s=rng.uniform(4.0, 10.0),
        climb_limit_mps=climb_limit_mps,
        turning_drag_mps2=rng.uniform(0.2, 0.6),
        bank_limit_deg=bank_limit_deg,
    )


class ResponseArrays:
    """The responses of F flights, one (F,) array per field of :class:`AircraftResponse`."""

    def __init__(self, responses: Sequence[AircraftResponse]) -> None:
        columns = {f.name: np.array([getattr(r, f.name) for r in responses]) for f in fields(AircraftResponse)}
        self.speed_time_s: FloatArray = columns["speed_time_s"]
        self.side_time_s: FloatArray = columns["side_time_s"]
        self.yaw_time_s: FloatArray = columns["yaw_time_s"]
        self.vertical_time_s: FloatArray = columns["vertical_time_s"]
        self.bank_time_s: FloatArray = columns["bank_time_s"]
        self.height_time_s: FloatArray = columns["height_time_s"]
        self.climb_limit_mps: FloatArray = columns["climb_limit_mps"]
        self.turning_drag_mps2: FloatArray = columns["turning_drag_mps2"]
        self.bank_limit_rad: FloatArray = np.radians(columns["bank_limit_deg"])


@dataclass(frozen=True, slots=True)
class Motion:
    """What the air does to F aircraft at one instant."""

    acceleration: FloatArray
    """(3, F) north, east, down. [m/s2]"""
    load_factor: FloatArray
    yaw_rate: FloatArray
    """Of the fuselage. [rad/s]"""


def climb_command(response: ResponseArrays, height_m: FloatArray, wanted_m: FloatArray) -> FloatArray:
    """Climb through the air that the height hold asks for. [m/s]"""
    wish = (wanted_m - height_m) / response.height_time_s
    return np.clip(wish, -response.climb_limit_mps, response.climb_limit_mps)


def fly(
    response: ResponseArrays,
    air: FloatArray,
    bank: FloatArray,
    heading: FloatArray,
    climb_mps: FloatArray,
    speed_command_mps: FloatArray,
) -> Motion:
    """Forces on F aircraft.

    Parameters
    ----------
    air : (3, F)
        Velocity relative to the local air, gusts included; north, east, down. [m/s]
    bank, heading : (F,)
        Of the fuselage. [rad]
    climb_mps, speed_command_mps : (F,)
        Commanded climb through the air and true airspeed. [m/s]
    """
    speed = np.sqrt(np.einsum("if,if->f", air, air))
    along = air / speed
    level = np.hypot(along[0], along[1])
    right = np.array([-along[1] / level, along[0] / level])
    upward = np.array([right[1] * along[2], -right[0] * along[2], right[0] * along[1] - right[1] * along[0]])
    rise = 1.0 + (climb_mps + air[2]) / (GRAVITY * response.vertical_time_s)
    load = np.clip(rise, LEAST_LIFT, MOST_LIFT) / np.cos(bank)
    thrust = (speed_command_mps - speed) / response.speed_time_s + GRAVITY * climb_mps / speed
    thrust -= response.turning_drag_mps2 * (load**2 - 1.0)
    slip = np.sin(np.arctan2(air[1], air[0]) - heading)
    sideways = GRAVITY * load * np.sin(bank) - speed * slip / response.side_time_s
    lift = GRAVITY * load * np.cos(bank)
    acceleration = thrust * along + lift * upward
    acceleration[:2] += sideways * right
    acceleration[2] += GRAVITY
    yaw_rate = GRAVITY * load * np.sin(bank) / speed + slip / response.yaw_time_s
    return Motion(acceleration, load, yaw_rate)

"""Flights of known truth: plans of segments, flown through wind and gusts, many at once."""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import IntEnum

import numpy as np

from service.domain.arrays import BoolArray, FloatArray, IntArray
from tests.synthetic.air import GRAVITY, SEA_LEVEL_DENSITY, Atmosphere
from tests.synthetic.aircraft import AircraftResponse, ResponseArrays, climb_command, fly
from tests.synthetic.gust_field import GustField, GustModel

STEP_S = 0.05
REFERENCE_HEIGHT_M = 100.0
ROUGHNESS_M = 0.03
"""Of grass (check values g)."""
PROFILE_JOINT_M = 10.0
"""Power law above, logarithm below."""
PROBE_HEIGHT_M = 0.5
"""Of the probe above the ground, at rest."""
TAKE_OFF_ACCELERATION_MPS2 = 3.0
BRAKING_MPS2 = 2.5
CLIMB_SMOOTHING_S = 1.5
"""Of the climb that is commanded."""
GUST_FULL_HEIGHT_M = 15.0
"""Below it the ground takes the vertical gusts away."""


class Leg(IntEnum):
    REST = 0
    ROLL = 1
    STRAIGHT = 2
    GROUND_CIRCLE = 3
    AIR_CIRCLE = 4
    LAND = 5


@dataclass(frozen=True, slots=True)
class Segment:
    leg: Leg
    duration_s: float
    calibrated_airspeed_mps: float = 17.0
    height_m: float = REFERENCE_HEIGHT_M
    heading_deg: float = np.nan
    """Of the air velocity; NaN keeps the heading met at the start."""
    radius_m: float = 80.0
    direction: int = 1
    """+1 right turn, -1 left turn."""
    loiter: int = -1
    """Which loiter the segment belongs to; -1 none."""


@dataclass(frozen=True, slots=True)
class MeanWind:
    """Velocity of the air mass at 100 m (it blows towards), its shear and its drift."""

    north_mps: float
    east_mps: float
    exponent: float = 1.0 / 7.0
    drift_north_mps2: float = 0.0
    drift_east_mps2: float = 0.0


@dataclass(frozen=True, slots=True)
class FlightPlan:
    segments: tuple[Segment, ...]
    start_heading_deg: float
    wind: MeanWind
    gust: GustModel
    response: AircraftResponse
    atmosphere: Atmosphere

    @property
    def duration_s(self) -> float:
        return float(sum(segment.duration_s for segment in self.segments))


def wind_factor(height_m: FloatArray, exponent: FloatArray | float) -> FloatArray:
    """Mean wind at a height over that at 100 m: a power law, joined at 10 m to a log law down to the probe at rest."""
    high = np.maximum(height_m, PROFILE_JOINT_M) / REFERENCE_HEIGHT_M
    low = np.clip(height_m, PROBE_HEIGHT_M, PROFILE_JOINT_M) / ROUGHNESS_M
    return np.asarray(high**exponent * np.log(low) / np.log(PROFILE_JOINT_M / ROUGHNESS_M))


def circle_period_s(true_airspeed_mps: float, wind_mps: float, radius_m: float) -> float:
    """Time once round a circle over the ground at constant airspeed (wind below the airspeed). [s]"""
    angle = np.linspace(0.0, 2.0 * np.pi, 721)[:-1]
    ground = wind_mps * np.cos(angle) + np.sqrt(true_airspeed_mps**2 - (wind_mps * np.sin(angle)) ** 2)
    return float(2.0 * np.pi * radius_m * np.mean(1.0 / ground))


@dataclass(frozen=True, slots=True)
class FlightHistory:
    """One flight as flown, every `STEP_S`; arrays (n,) or (3, n) north, east, down."""

    time_s: FloatArray
    position_m: FloatArray
    velocity_mps: FloatArray
    local_air_mps: FloatArray
    """Velocity of the air at the aircraft: mean wind and gust."""
    bank_rad: FloatArray
    heading_rad: FloatArray
    """Of the fuselage."""
    pitch_rad: FloatArray
    load_factor: FloatArray
    on_ground: BoolArray
    loiter: IntArray

    @property
    def air_velocity_mps(self) -> FloatArray:
        """(3, n) velocity relative to the air."""
        return self.velocity_mps - self.local_air_mps

    @property
    def height_m(self) -> FloatArray:
        return np.asarray(-self.position_m[2])


class _Segments:
    """The segments of F plans, padded to equal count; (S, F) arrays and the current one per flight."""

    def __init__(self, plans: Sequence[FlightPlan]) -> None:
        count = max(len(plan.segments) for plan in plans)
        padded = [plan.segments + (plan.segments[-1],) * (count - len(plan.segments)) for plan in plans]
        self._leg = self._column(padded, "leg").astype(np.int64)
        self._speed = self._column(padded, "calibrated_airspeed_mps")
        self._height = self._column(padded, "height_m")
        self._heading = np.radians(self._column(padded, "heading_deg"))
        self._radius = self._column(padded, "radius_m")
        self._direction = self._column(padded, "direction")
        self._loiter = self._column(padded, "loiter").astype(np.int64)
        self._end = np.cumsum(self._column(padded, "duration_s"), axis=0)
        for flight, plan in enumerate(plans):
            self._end[len(plan.segments) - 1 :, flight] = np.inf
        self._flights = np.arange(len(plans))
        self.current = np.zeros(len(plans), dtype=np.int64)
        self._pick()

    @staticmethod
    def _column(padded: list[tuple[Segment, ...]], name: str) -> FloatArray:
        return np.array([[float(getattr(segment, name)) for segment in segments] for segments in padded]).T

    def _pick(self) -> None:
        at = (self.current, self._flights)
        self.leg, self.speed, self.height = self._leg[at], self._speed[at], self._height[at]
        self.heading, self.radius, self.direction = self._heading[at], self._radius[at], self._direction[at]
        self.loiter, self.end = self._loiter[at], self._end[at]

    def advance(self, time_s: float) -> BoolArray:
        """(F,) which flights enter a new segment at this time."""
        entering = time_s >= self.end
        if entering.any():
            self.current = self.current + entering
            self._pick()
        return entering


class _Flights:
    """The state of F flights, stepped together."""

    def __init__(self, plans: Sequence[FlightPlan], field: GustField) -> None:
        self.segments = _Segments(plans)
        self.field = field
        self.response = ResponseArrays([plan.response for plan in plans])
        self.wind = np.array([[p.wind.north_mps, p.wind.east_mps] for p in plans]).T
        self.drift = np.array([[p.wind.drift_north_mps2, p.wind.drift_east_mps2] for p in plans]).T
        self.exponent = np.array([p.wind.exponent for p in plans])
        self.atmospheres = [p.atmosphere for p in plans]
        first = [p.segments[0] for p in plans]
        self.on_ground = np.array([s.leg in (Leg.REST, Leg.ROLL) for s in first])
        flights = len(plans)
        self.position = np.zeros((3, flights))
        self.position[2] = np.where(self.on_ground, 0.0, -np.array([s.height_m for s in first]))
        self.in_air_mass = self.position.copy()
        self.heading = np.radians([p.start_heading_deg for p in plans])
        self.bank = np.zeros(flights)
        self.hold = self.heading.copy()
        self.centre = np.zeros((2, flights))
        self.true_speed = self._true_speed()
        self.velocity = np.zeros((3, flights))
        self.local_air = np.zeros((3, flights))
        self.load_factor = np.ones(flights)
        self.climb = np.zeros(flights)
        self._start_moving()

    def _true_speed(self) -> FloatArray:
        """The commanded one, by the density at the commanded height."""
        heights = self.segments.height
        density = np.array([air.density(np.array(h)) for air, h in zip(self.atmospheres, heights, strict=True)])
        return np.asarray(self.segments.speed * np.sqrt(SEA_LEVEL_DENSITY / density))

    def _start_moving(self) -> None:
        self._meet_air(0.0)
        nose = np.array([np.cos(self.heading), np.sin(self.heading)])
        flying = self.true_speed * nose + self.local_air[:2]
        self.velocity[:2] = np.where(self.on_ground, 0.0, flying)
        self._enter(np.ones(self.heading.size, dtype=np.bool_))

    def _meet_air(self, time_s: float) -> None:
        height = -self.position[2]
        self.mean_wind = (self.wind + self.drift * time_s) * wind_factor(height, self.exponent)
        gust = self.field.velocity(self.in_air_mass, time_s)
        gust[2] *= np.minimum(height / GUST_FULL_HEIGHT_M, 1.0)
        gust[:2] += self.mean_wind
        self.local_air = gust

    def _enter(self, entering: BoolArray) -> None:
        """Fix what a segment takes from the state at its start: the heading to hold, the centre to circle."""
        air = self.velocity - self.local_air
        met = np.where(self.on_ground, self.heading, np.arctan2(air[1], air[0]))
        wanted = np.where(np.isnan(self.segments.heading), met, self.segments.heading)
        self.hold = np.where(entering, wanted, self.hold)
        speed = np.maximum(np.hypot(self.velocity[0], self.velocity[1]), 1e-6)
        right = np.array([-self.velocity[1], self.velocity[0]]) / speed
        centre = self.position[:2] + right * self.segments.direction * self.segments.radius
        self.centre = np.where(entering, centre, self.centre)
        self.true_speed = self._true_speed()
        self.on_ground = np.where(entering & (self.segments.leg > Leg.ROLL), False, self.on_ground)

    def _bank_command(self, air: FloatArray) -> FloatArray:
        leg = self.segments.leg
        sideways = np.where(leg == Leg.GROUND_CIRCLE, self._circle_acceleration(air), self._hold_acceleration(air))
        steady = self.segments.direction * self.true_speed**2 / self.segments.radius
        sideways = np.where(leg == Leg.AIR_CIRCLE, steady, sideways)
        return np.clip(np.arctan(sideways / GRAVITY), -self.response.bank_limit_rad, self.response.bank_limit_rad)

    def _hold_acceleration(self, air: FloatArray) -> FloatArray:
        error = self.hold - np.arctan2(air[1], air[0])
        error = (error + np.pi) % (2.0 * np.pi) - np.pi
        # no steeper than 35 degrees of bank on the way to a new heading
        return np.asarray(np.clip(0.5 * error * self.true_speed, -0.7 * GRAVITY, 0.7 * GRAVITY))

    def _circle_acceleration(self, air: FloatArray) -> FloatArray:
        """To the right of the air velocity, so that the track keeps to the circle over the ground. [m/s2]"""
        out = self.position[:2] - self.centre
        radius = np.maximum(np.hypot(out[0], out[1]), 1.0)
        out = out / radius
        direction = self.segments.direction
        outward = out[0] * self.velocity[0] + out[1] * self.velocity[1]
        around = direction * (out[0] * self.velocity[1] - out[1] * self.velocity[0])
        error = np.clip(radius - self.segments.radius, -30.0, 30.0)
        inward = np.maximum(around, 0.0) ** 2 / radius + 0.09 * error + 0.45 * outward
        level = np.hypot(air[0], air[1])
        # with a crab angle only a part of what the bank gives points inward
        share = direction * (out[0] * air[1] - out[1] * air[0]) / level
        wish = direction * inward / np.clip(share, 0.4, 1.0)
        # never banks far out of its own turn
        return np.asarray(direction * np.maximum(direction * wish, -0.25 * GRAVITY))

    def step(self, time_s: float) -> None:
        """Meet the air at this time and decide; `move` carries on from there."""
        entering = self.segments.advance(time_s)
        self._meet_air(time_s)
        if entering.any():
            self._enter(entering)

    def move(self) -> None:
        air = self.velocity - self.local_air
        wish = climb_command(self.response, -self.position[2], self.segments.height)
        self.climb = self.climb + STEP_S * (wish - self.climb) / CLIMB_SMOOTHING_S
        flown = air.copy()
        # on the ground the flow may be still; keep the flight equations away from it
        flown[0] = np.where(self.on_ground, self.true_speed, flown[0])
        motion = fly(self.response, flown, self.bank, self.heading, self.climb, self.true_speed)
        self.load_factor = np.where(self.on_ground, 1.0, motion.load_factor)
        bank_rate = (self._bank_command(flown) - self.bank) / self.response.bank_time_s
        self.bank = np.where(self.on_ground, 0.0, self.bank + STEP_S * bank_rate)
        self.heading = np.where(self.on_ground, self.heading, self.heading + STEP_S * motion.yaw_rate)
        rolling = self._ground_velocity()
        self.velocity = np.where(self.on_ground, rolling, self.velocity + STEP_S * motion.acceleration)
        travel = STEP_S * self.velocity
        self.position = self.position + travel
        self.in_air_mass = self.in_air_mass + travel
        self.in_air_mass[:2] -= STEP_S * self.mean_wind
        self._touch_down()

    def _ground_velocity(self) -> FloatArray:
        speed = np.hypot(self.velocity[0], self.velocity[1])
        rolling = self.segments.leg == Leg.ROLL
        faster = speed + STEP_S * TAKE_OFF_ACCELERATION_MPS2
        slower = np.maximum(speed - STEP_S * BRAKING_MPS2, 0.0)
        wanted = np.where(rolling, faster, slower)
        nose = np.array([np.cos(self.heading), np.sin(self.heading), np.zeros_like(speed)])
        return np.asarray(wanted * nose)

    def _touch_down(self) -> None:
        low = (self.segments.leg == Leg.LAND) & (self.position[2] > -0.2)
        self.on_ground = self.on_ground | low
        self.position[2] = np.where(self.on_ground, 0.0, np.minimum(self.position[2], -0.1))

    def pitch(self) -> FloatArray:
        """Climb through the air plus some 3 degrees of incidence at 1 g. [rad]"""
        return np.where(self.on_ground, 0.03, self.climb / self.true_speed + 0.05 * self.load_factor)


def fly_plans(plans: Sequence[FlightPlan], generators: Sequence[np.random.Generator]) -> list[FlightHistory]:
    """Fly all plans together; each flight's gust field is drawn from its own generator."""
    field = GustField([plan.gust for plan in plans], generators)
    flights = _Flights(plans, field)
    steps = int(np.ceil(max(plan.duration_s for plan in plans) / STEP_S))
    vectors = np.empty((steps, 9, len(plans)))
    scalars = np.empty((steps, 4, len(plans)))
    marks = np.empty((steps, 2, len(plans)), dtype=np.int64)
    for step in range(steps):
        flights.step(step * STEP_S)
        vectors[step, 0:3], vectors[step, 3:6] = flights.position, flights.velocity
        vectors[step, 6:9] = flights.local_air
        scalars[step, 0], scalars[step, 1] = flights.bank, flights.heading
        marks[step, 0], marks[step, 1] = flights.on_ground, flights.segments.loiter
        flights.move()
        # the forces of this step belong to its start
        scalars[step, 2], scalars[step, 3] = flights.pitch(), flights.load_factor
    return [_history(plan, vectors[:, :, i], scalars[:, :, i], marks[:, :, i]) for i, plan in enumerate(plans)]


def _history(plan: FlightPlan, vectors: FloatArray, scalars: FloatArray, marks: IntArray) -> FlightHistory:
    count = int(np.floor(plan.duration_s / STEP_S))
    vectors, scalars, marks = vectors[:count].T.copy(), scalars[:count].T.copy(), marks[:count].T.copy()
    return FlightHistory(
        time_s=np.asarray(STEP_S * np.arange(count), dtype=np.float64),
        position_m=vectors[0:3],
        velocity_mps=vectors[3:6],
        local_air_mps=vectors[6:9],
        bank_rad=scalars[0],
        heading_rad=scalars[1],
        pitch_rad=scalars[2],
        load_factor=scalars[3],
        on_ground=marks[0].astype(np.bool_),
        loiter=marks[1],
    )

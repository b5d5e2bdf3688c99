"""Attitude, load factor and ground contact of a log file."""

from collections.abc import Sequence

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.log import AttitudeSamples, GpsSamples, GroundContactSamples, LoadFactorSamples
from service.readers.body_axes import CONVENTIONAL, LiftAxis, euler_angles, lift_axis, load_factor
from service.readers.plausible import cleaned
from service.readers.ulog_choice import Choice, Rating, choose
from service.readers.ulog_fields import ACCELERATION_TOPICS, ATTITUDE_TOPICS, GROUND_TOPICS, Topic
from service.readers.ulog_gps import ground_speed, moving_fast
from service.readers.ulog_recording import Recording, of_topics, since

FORCES = tuple(f"specific_force_{axis}_mps2" for axis in "xyz")
QUATERNION = tuple(f"quaternion_{i}" for i in range(4))
CONTACT_SPEED_MPS = 10.0
"""Faster than this for a tenth of the time while "on the ground": the recorder's notion is not to be trusted."""
AXIS_SAMPLES = 20_000
"""Enough to find an axis by a median, even if a small part of them is in motion."""


def choose_attitude(found: Sequence[Recording]) -> Choice:
    """The attitude with most samples."""
    return _choose_vectors("attitude", found, ATTITUDE_TOPICS, QUATERNION)


def choose_acceleration(found: Sequence[Recording]) -> Choice:
    """The calibrated accelerometer, else the inertial sensors."""
    return _choose_vectors("load_factor", found, ACCELERATION_TOPICS, FORCES)


def _choose_vectors(
    sensor: str, found: Sequence[Recording], topics: tuple[Topic, ...], parts: tuple[str, ...]
) -> Choice:
    candidates = [r for r in of_topics(found, topics) if all(part in r for part in parts)]
    return choose(sensor, candidates, lambda r: _rate_vectors(r, parts), prefer_first_topic=True, accept_dead=False)


def _rate_vectors(recording: Recording, parts: tuple[str, ...]) -> Rating:
    """Vectors that are finite and not all zero can be used; ones that never change come from nothing alive."""
    finite = np.ones(recording.time_s.size, dtype=np.bool_)
    nonzero, changing = np.zeros(finite.size, dtype=np.bool_), False
    for part in parts:
        values = recording.values(part)
        finite &= np.isfinite(values)
        nonzero |= values != 0.0
        changing |= bool(np.any(values != values[0]))
    usable = int(np.count_nonzero(finite & nonzero))
    if not usable:
        return Rating(0, ("no possible value",))
    return Rating(usable, () if changing or usable < 5 else ("constant",))


def flight_axis(acceleration: Choice, gps: GpsSamples | None, zero_s: float) -> LiftAxis:
    """Along which body axis the wing pulls; the usual one where the log does not tell."""
    recording = acceleration.chosen
    if recording is None or gps is None:
        return CONVENTIONAL
    part = slice(None, None, max(1, recording.time_s.size // AXIS_SAMPLES))
    moving = moving_fast(gps, since(zero_s, recording.time_s[part]))
    return lift_axis(np.stack([recording.values(force, part)[moving] for force in FORCES], axis=1))


def attitude_samples(choice: Choice, lift: LiftAxis, zero_s: float) -> AttitudeSamples | None:
    """The attitude's stream, in the axes of forward flight."""
    recording = choice.chosen
    if recording is None:
        return None

    def quaternion(part: slice) -> list[FloatArray]:
        return [recording.values(name, part) for name in QUATERNION]

    roll, pitch, yaw = euler_angles(quaternion, recording.time_s.size, lift)
    return AttitudeSamples(since(zero_s, recording.time_s), roll, pitch, yaw)


def load_factor_samples(choice: Choice, lift: LiftAxis, zero_s: float) -> LoadFactorSamples | None:
    """The load factor's stream."""
    recording = choice.chosen
    if recording is None:
        return None
    values = cleaned("load_factor", load_factor(recording.values(FORCES[lift.axis]), lift))
    return LoadFactorSamples(since(zero_s, recording.time_s), values, f"{choice.source}, {lift.words}")


def ground_contact_samples(
    found: Sequence[Recording], gps: GpsSamples | None, zero_s: float
) -> GroundContactSamples | None:
    """The recorder's notion of standing on the ground, where it is one.

    None if it never changes (logs of whole flights say "landed" throughout) or if the GPS contradicts it.
    """
    for recording in of_topics(found, GROUND_TOPICS):
        on_ground = recording.values("on_ground") != 0.0 if "on_ground" in recording else np.zeros(1, dtype=np.bool_)
        time_s = since(zero_s, recording.time_s)
        if on_ground.all() or not on_ground.any() or _contradicted(time_s, on_ground, gps):
            continue
        return GroundContactSamples(time_s, on_ground)
    return None


def _contradicted(time_s: FloatArray, on_ground: BoolArray, gps: GpsSamples | None) -> bool:
    if gps is None:
        return False
    fast = ground_speed(gps, time_s) > CONTACT_SPEED_MPS
    return bool(fast.any() and on_ground[fast].mean() > 0.1)

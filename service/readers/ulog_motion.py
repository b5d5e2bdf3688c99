"""Attitude, load factor and ground contact of a log file."""

from collections.abc import Sequence

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.log import AttitudeSamples, GpsSamples, GroundContactSamples, LoadFactorSamples
from service.readers.body_axes import CONVENTIONAL, LiftAxis, euler_angles, lift_axis, load_factor
from service.readers.plausible import cleaned
from service.readers.ulog_choice import Choice, Rating, choose
from service.readers.ulog_fields import ACCELERATION_TOPICS, ATTITUDE_TOPICS, GROUND_TOPICS
from service.readers.ulog_gps import ground_speed, moving_fast
from service.readers.ulog_recording import Recording, of_topics, since

FORCES = tuple(f"specific_force_{axis}_mps2" for axis in "xyz")
QUATERNION = tuple(f"quaternion_{i}" for i in range(4))
CONTACT_SPEED_MPS = 10.0
"""Faster than this for a tenth of the time while "on the ground": the recorder's notion is not to be trusted."""


def choose_attitude(found: Sequence[Recording]) -> Choice:
    """The attitude with most samples."""
    return _choose_vectors("attitude", found, ATTITUDE_TOPICS, QUATERNION)


def choose_acceleration(found: Sequence[Recording]) -> Choice:
    """The calibrated accelerometer, else the inertial sensors."""
    return _choose_vectors("load_factor", found, ACCELERATION_TOPICS, FORCES)


def _choose_vectors(sensor: str, found: Sequence[Recording], topics: tuple, parts: tuple[str, ...]) -> Choice:  # type: ignore[type-arg]
    candidates = [r for r in of_topics(found, topics) if all(part in r.values for part in parts)]

    def rate(recording: Recording) -> Rating:
        norm = np.linalg.norm(_columns(recording, parts), axis=1)
        usable = int(np.count_nonzero(np.isfinite(norm) & (norm > 0.0)))
        still = usable >= 5 and all(np.ptp(recording.values[part]) == 0.0 for part in parts)
        defects = ("no possible value",) if not usable else ("constant",) if still else ()
        return Rating(usable, defects)

    return choose(sensor, candidates, rate, prefer_first_topic=True, accept_dead=False)


def _columns(recording: Recording, parts: tuple[str, ...]) -> FloatArray:
    return np.stack([recording.values[part] for part in parts], axis=1)


def flight_axis(acceleration: Choice, gps: GpsSamples | None, zero_s: float) -> LiftAxis:
    """Along which body axis the wing pulls; the usual one where the log does not tell."""
    recording = acceleration.chosen
    if recording is None or gps is None:
        return CONVENTIONAL
    return lift_axis(_columns(recording, FORCES), moving_fast(gps, since(zero_s, recording.time_s)))


def attitude_samples(choice: Choice, lift: LiftAxis, zero_s: float) -> AttitudeSamples | None:
    """The attitude's stream, in the axes of forward flight."""
    if choice.chosen is None:
        return None
    roll, pitch, yaw = euler_angles(_columns(choice.chosen, QUATERNION), lift)
    return AttitudeSamples(since(zero_s, choice.chosen.time_s), roll, pitch, yaw)


def load_factor_samples(choice: Choice, lift: LiftAxis, zero_s: float) -> LoadFactorSamples | None:
    """The load factor's stream."""
    if choice.chosen is None:
        return None
    values = cleaned("load_factor", load_factor(_columns(choice.chosen, FORCES), lift))
    return LoadFactorSamples(since(zero_s, choice.chosen.time_s), values, f"{choice.source}, {lift.words}")


def ground_contact_samples(
    found: Sequence[Recording], gps: GpsSamples | None, zero_s: float
) -> GroundContactSamples | None:
    """The recorder's notion of standing on the ground, where it is one.

    None if it never changes (logs of whole flights say "landed" throughout) or if the GPS contradicts it.
    """
    for recording in of_topics(found, GROUND_TOPICS):
        on_ground = recording.values.get("on_ground", np.zeros(1)) != 0.0
        time_s = since(zero_s, recording.time_s)
        if on_ground.all() or not on_ground.any() or _contradicted(time_s, on_ground, gps):
            continue
        return GroundContactSamples(time_s, on_ground)
    return None


def _contradicted(time_s: FloatArray, on_ground: np.typing.NDArray[np.bool_], gps: GpsSamples | None) -> bool:
    if gps is None:
        return False
    fast = ground_speed(gps, time_s) > CONTACT_SPEED_MPS
    return bool(fast.any() and on_ground[fast].mean() > 0.1)

"""Which of several instances of a sensor to use: the live one with most to say, and why."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.log import SensorNote
from service.readers.plausible import cleaned
from service.readers.ulog_fields import Topic
from service.readers.ulog_recording import Recording

FEWEST_TO_JUDGE = 5
"""With fewer samples the same value throughout proves nothing."""
STUCK_SAMPLES = 100
"""A run of one value this long, over half of the samples or more, is no measurement of moving air."""


@dataclass(frozen=True, slots=True)
class Rating:
    usable: int
    """Samples that can be used."""
    defects: tuple[str, ...] = ()
    """Why the sensor is dead; empty for a live one."""


@dataclass(frozen=True, slots=True)
class Choice:
    """The recording to use, None without any, and a note on each; its times are the recorder's, not yet the log's."""

    chosen: Recording | None
    notes: tuple[SensorNote, ...]
    source: str
    """In plain words; empty without a choice."""


def rate_values(column: str, values: FloatArray) -> Rating:
    """Judge a column by its values alone."""
    usable = values[np.isfinite(cleaned(column, values))]
    if not usable.size:
        return Rating(0, ("no possible value",))
    if usable.size >= FEWEST_TO_JUDGE and np.ptp(usable) == 0.0:
        return Rating(usable.size, (f"constant at {usable[0]:.4g}",))
    if longest_run(usable) >= max(STUCK_SAMPLES, usable.size / 2):
        return Rating(usable.size, ("stuck at one value for most of the time",))
    return Rating(usable.size)


def longest_run(values: FloatArray) -> int:
    """Length of the longest run of one value."""
    changes = np.flatnonzero(np.diff(values) != 0.0)
    return int(np.diff(np.concatenate([[-1], changes, [values.size - 1]])).max())


def choose(
    sensor: str,
    candidates: Sequence[Recording],
    rate: Callable[[Recording], Rating],
    *,
    prefer_first_topic: bool = False,
    accept_dead: bool = True,
) -> Choice:
    """Choose among candidates: live before dead, then (if asked) the earlier topic, then more usable samples.

    Parameters
    ----------
    sensor : name for the notes.
    candidates : in the order of preference that breaks ties.
    accept_dead : whether a dead one is better than none, so that later steps can say what is wrong with it.
    """
    ratings = [rate(candidate) for candidate in candidates]
    topics = [candidate.topic for candidate in candidates]

    def merit(index: int) -> tuple[bool, int, int]:
        rating = ratings[index]
        return bool(rating.defects), topics.index(topics[index]) if prefer_first_topic else 0, -rating.usable

    ranked = sorted(range(len(candidates)), key=merit)
    best = next((index for index in ranked if accept_dead or not ratings[index].defects), None)
    notes = tuple(
        _note(sensor, candidate, rating, _why(index, best, ratings, topics))
        for index, (candidate, rating) in enumerate(zip(candidates, ratings, strict=True))
    )
    if best is None:
        return Choice(None, notes, "")
    notes = (*notes[:best], replace(notes[best], chosen=True), *notes[best + 1 :])
    return Choice(candidates[best], notes, _source(candidates[best], candidates))


def _why(index: int, best: int | None, ratings: Sequence[Rating], topics: Sequence[Topic]) -> str:
    """Why this one was chosen, or was not."""
    if best is None:
        return "not used"
    if index != best:
        if ratings[index].defects:
            return "not used"
        alike = topics[index] is topics[best]
        return (
            "not used, fewer samples"
            if alike and ratings[index].usable < ratings[best].usable
            else "not used, second choice"
        )
    others = [rating for other, rating in enumerate(ratings) if other != best]
    if not others:
        return "the only one"
    if all(rating.defects for rating in others) and not ratings[best].defects:
        return "used, the only live one"
    return "used"


def _source(chosen: Recording, candidates: Sequence[Recording]) -> str:
    alike = sum(candidate.topic is chosen.topic for candidate in candidates)
    return f"{chosen.topic.words}, instance {chosen.instance}" + (f" of {alike}" if alike > 1 else "")


def _note(sensor: str, recording: Recording, rating: Rating, why: str) -> SensorNote:
    state = " and ".join(rating.defects) or f"{rating.usable} usable samples"
    reason = f"{recording.topic.words}: {state}; {why}"
    if recording.impossible_times:
        reason += f"; {recording.impossible_times} samples with impossible times left out"
    return SensorNote(
        sensor=sensor,
        instance=recording.instance,
        samples=recording.time_s.size,
        chosen=False,
        dead=bool(rating.defects),
        reason=reason,
        start_s=float(recording.time_s[0]),
        end_s=float(recording.time_s[-1]),
    )

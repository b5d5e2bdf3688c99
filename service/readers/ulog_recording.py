"""One sensor's data out of a ULog container, on clean times, its quantities turned into SI when asked for.

What is written takes half the room of what is decoded, so it stays as it is until its stream is made, and goes then.
"""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from service.domain.arrays import BoolArray, FloatArray
from service.domain.errors import InputTooLarge
from service.readers.limits import MAXIMUM_SPAN_S
from service.readers.ulog_fields import ALL_TOPICS, SAMPLE_TIME, TIME, LogField, Topic

LONGEST_TRANSPORT_S = 1.0
"""A sampling time farther than this from the time of writing is garbage: the time of writing counts."""

RawArray = npt.NDArray[Any]


@dataclass(frozen=True, slots=True)
class Recording:
    """What one instance of a sensor recorded: n samples, in strictly increasing time once ordered."""

    topic: Topic
    instance: int
    time_s: FloatArray
    """(n,) since the recorder started."""
    raw: Mapping[str, tuple[RawArray, LogField]]
    """Quantity of the table -> as written, and how it becomes SI; quantities that the log lacks are absent."""
    order: RawArray | None = None
    """Picks the n samples out of the raw arrays; None: all, as they stand."""
    steps_back: int = 0
    impossible_times: int = 0

    def __contains__(self, quantity: str) -> bool:
        return quantity in self.raw

    def values(self, quantity: str, part: slice = slice(None)) -> FloatArray:
        """(n,) of a quantity, or a part of it, in SI.

        Raises
        ------
        KeyError
            The log does not carry it.
        """
        array, field = self.raw[quantity]
        return in_si(array[part] if self.order is None else array[self.order[part]], field)

    def reordered(self) -> BoolArray | None:
        """(n,) samples that stood behind later ones in the file; None where none did."""
        if self.steps_back == 0 or self.order is None or self.order.size == 0:
            return None
        least_after = np.minimum.accumulate(self.order[::-1])[::-1]
        return np.asarray(np.append(self.order[:-1] > least_after[1:], False))

    def renamed(self, quantity: str, name: str) -> "Recording":
        """The same recording with one of its quantities alone, under another name."""
        return replace(self, raw={name: self.raw[quantity]})


def in_si(array: RawArray, field: LogField) -> FloatArray:
    """What is written, in SI. (n,)"""
    # damaged numbers may be of any kind; they are sorted out by what is possible
    with np.errstate(invalid="ignore", over="ignore"):
        values: FloatArray = array.astype(np.float64)
        values *= field.scale
        values += field.offset
    return values


def recordings(topics: list[Any], samples_per_stream: int) -> list[Recording]:
    """All needed recordings, ordered in time. Empties `topics`.

    Raises
    ------
    InputTooLarge
    """
    found = list(_decoded(topics, samples_per_stream))
    reference_s = float(np.median([np.median(r.time_s) for r in found])) if found else 0.0
    return [_ordered(_plausible(recording, reference_s)) for recording in found]


def _decoded(topics: list[Any], samples_per_stream: int) -> Iterator[Recording]:
    by_name = {topic.name: topic for topic in ALL_TOPICS}
    topics.reverse()
    while topics:
        written = topics.pop()
        count = len(written.data[TIME.name])
        if count > samples_per_stream:
            raise InputTooLarge(f"A stream of the log has {count} samples; the limit is {samples_per_stream}.")
        topic, instance = by_name[written.name], int(written.multi_id)
        time_s, raw = _times(written.data), _present(topic, written.data)
        del written
        yield Recording(topic, instance, time_s, raw)


def _present(topic: Topic, data: Mapping[str, RawArray]) -> dict[str, tuple[RawArray, LogField]]:
    chosen = {
        quantity: next((field for field in variants if field.name in data), None)
        for quantity, variants in topic.fields.items()
    }
    # copies: views would keep the whole messages, most of whose fields nobody needs
    return {quantity: (np.array(data[field.name]), field) for quantity, field in chosen.items() if field is not None}


def _times(data: Mapping[str, RawArray]) -> FloatArray:
    """When the data were sampled, or written where that is unknown. (n,) [s]"""
    written = in_si(data[TIME.name], TIME)
    if SAMPLE_TIME.name not in data:
        return written
    sampled = in_si(data[SAMPLE_TIME.name], SAMPLE_TIME)
    return np.where(np.abs(sampled - written) <= LONGEST_TRANSPORT_S, sampled, written)


def _plausible(recording: Recording, reference_s: float) -> Recording:
    """Without the samples whose time is so far from the rest of the log that it cannot be one."""
    keep = np.abs(recording.time_s - reference_s) <= MAXIMUM_SPAN_S / 2
    if keep.all():
        return recording
    kept = np.flatnonzero(keep)
    return replace(recording, time_s=recording.time_s[kept], order=kept, impossible_times=int(keep.size - kept.size))


def _ordered(recording: Recording) -> Recording:
    """Sorted by time; of samples with the same time the first in the file is kept."""
    steps = np.diff(recording.time_s)
    if np.all(steps > 0.0):
        return recording
    order = np.argsort(recording.time_s, kind="stable")
    time_s = recording.time_s[order]
    first = np.concatenate([[True], np.diff(time_s) > 0.0])
    picked = order[first] if recording.order is None else recording.order[order[first]]
    return replace(recording, time_s=time_s[first], order=picked, steps_back=int(np.count_nonzero(steps < 0.0)))


def of_topics(found: Sequence[Recording], topics: tuple[Topic, ...]) -> list[Recording]:
    """The recordings of these topics that hold samples, in the order of the topics, then of the instances."""
    ranked = [(topics.index(r.topic), r.instance, r) for r in found if r.topic in topics and r.time_s.size]
    return [recording for *_, recording in sorted(ranked, key=lambda entry: entry[:2])]


def since(zero_s: float, time_s: FloatArray) -> FloatArray:
    """Times on the log's axis; whole microseconds, as the recorder has them."""
    return np.round(time_s - zero_s, 6)

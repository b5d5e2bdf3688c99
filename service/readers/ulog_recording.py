"""One sensor's data out of a ULog container: needed quantities in SI on clean times."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.errors import InputTooLarge
from service.readers.limits import MAXIMUM_SPAN_S
from service.readers.ulog_fields import ALL_TOPICS, SAMPLE_TIME, TIME, LogField, Topic

LONGEST_TRANSPORT_S = 1.0
"""A sampling time farther than this from the time of writing is garbage: the time of writing counts."""


@dataclass(frozen=True, slots=True)
class Recording:
    """What one instance of a sensor recorded, each array (n,). Times are finite, strictly increasing once ordered."""

    topic: Topic
    instance: int
    time_s: FloatArray
    """Since the recorder started."""
    values: Mapping[str, FloatArray]
    """Quantity of the table -> values in SI; quantities that the log does not carry are absent."""
    steps_back: int = 0
    impossible_times: int = 0


def recordings(topics: list[Any], samples_per_stream: int) -> list[Recording]:
    """All needed recordings, ordered in time. Empties `topics` as it goes: raw and decoded data never coexist."""
    found = list(_decoded(topics, samples_per_stream))
    reference_s = float(np.median([np.median(r.time_s) for r in found])) if found else 0.0
    return [_ordered(_plausible(recording, reference_s)) for recording in found]


def _decoded(topics: list[Any], samples_per_stream: int) -> Iterator[Recording]:
    by_name = {topic.name: topic for topic in ALL_TOPICS}
    topics.reverse()
    while topics:
        raw = topics.pop()
        count = len(raw.data[TIME.name])
        if count > samples_per_stream:
            raise InputTooLarge(f"A stream of the log has {count} samples; the limit is {samples_per_stream}.")
        yield _decode(by_name[raw.name], int(raw.multi_id), raw.data)


def _decode(topic: Topic, instance: int, data: Mapping[str, Any]) -> Recording:
    values = {}
    for quantity, variants in topic.fields.items():
        present = next((field for field in variants if field.name in data), None)
        if present is not None:
            values[quantity] = _si(data, present)
    return Recording(topic, instance, _times(data), values)


def _si(data: Mapping[str, Any], field: LogField) -> FloatArray:
    values = data[field.name].astype(np.float64)
    values *= field.scale
    values += field.offset
    return values  # type: ignore[no-any-return]


def _times(data: Mapping[str, Any]) -> FloatArray:
    """When the data were sampled, or written where that is unknown. (n,) [s]"""
    written = _si(data, TIME)
    if SAMPLE_TIME.name not in data:
        return written
    sampled = _si(data, SAMPLE_TIME)
    return np.where(np.abs(sampled - written) <= LONGEST_TRANSPORT_S, sampled, written)


def _plausible(recording: Recording, reference_s: float) -> Recording:
    """Without the samples whose time is so far from the rest of the log that it cannot be one."""
    keep = np.abs(recording.time_s - reference_s) <= MAXIMUM_SPAN_S / 2
    if keep.all():
        return recording
    return replace(_picked(recording, keep), impossible_times=int(np.count_nonzero(~keep)))


def _ordered(recording: Recording) -> Recording:
    """Sorted by time; of samples with the same time the first in the file is kept."""
    steps = np.diff(recording.time_s)
    if np.all(steps > 0.0):
        return recording
    order = np.argsort(recording.time_s, kind="stable")
    time_s = recording.time_s[order]
    first = np.concatenate([[True], np.diff(time_s) > 0.0])
    return replace(_picked(recording, order[first]), steps_back=int(np.count_nonzero(steps < 0.0)))


def _picked(recording: Recording, choice: np.typing.NDArray[Any]) -> Recording:
    values = {quantity: array[choice] for quantity, array in recording.values.items()}
    return replace(recording, time_s=recording.time_s[choice], values=values)


def of_topics(found: Sequence[Recording], topics: tuple[Topic, ...]) -> list[Recording]:
    """The recordings of these topics that hold samples, in the order of the topics, then of the instances."""
    ranked = [(topics.index(r.topic), r.instance, r) for r in found if r.topic in topics and r.time_s.size]
    return [recording for *_, recording in sorted(ranked, key=lambda entry: entry[:2])]


def since(zero_s: float, time_s: FloatArray) -> FloatArray:
    """Times on the log's axis; whole microseconds, as the recorder has them."""
    return np.round(time_s - zero_s, 6)

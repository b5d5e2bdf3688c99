"""ULog -> decoded log."""

from collections.abc import Iterable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np

from service.domain.codes import LogFormat
from service.domain.log import DecodedLog, ReadingGap, SensorNote
from service.readers.reading import ReadRequest, ReadResult
from service.readers.ulog_air import (
    choose_probe,
    choose_static,
    choose_temperature,
    probe_samples,
    static_samples,
    temperature_samples,
)
from service.readers.ulog_choice import Choice, choose
from service.readers.ulog_container import Container, Dropout, load_container
from service.readers.ulog_fields import GPS_TOPICS
from service.readers.ulog_gps import gps_samples, rate_gps, start_utc
from service.readers.ulog_motion import (
    attitude_samples,
    choose_acceleration,
    choose_attitude,
    flight_axis,
    ground_contact_samples,
    load_factor_samples,
)
from service.readers.ulog_recording import Recording, of_topics, recordings

MAGIC = b"ULog"


def is_ulog(head: bytes) -> bool:
    """Whether a file that begins with `head` claims to be a ULog."""
    return head.startswith(MAGIC)


def read_ulog(path: Path, request: ReadRequest) -> ReadResult:
    """Read a ULog. A log without a probe or GPS is readable: the stream is None.

    Time zero is the first decoded sample of the streams in use.

    Raises
    ------
    UnreadableInput, InputTooLarge
    """
    container = load_container(path, request.progress)
    found = recordings(container.topics, request.limits.samples_per_stream)
    return ReadResult(_decoded_log(container, found, request.sha256))


def _decoded_log(container: Container, found: Sequence[Recording], sha256: str) -> DecodedLog:
    probe = choose_probe(found)
    static = choose_static(found)
    temperature = choose_temperature(found, probe.chosen)
    receiver = choose("gps", of_topics(found, GPS_TOPICS), rate_gps)
    attitude = choose_attitude(found)
    acceleration = choose_acceleration(found)
    choices = (probe, static, temperature, receiver, attitude, acceleration)
    used = _used(choices)
    zero_s = min((float(recording.time_s[0]) for recording in used), default=0.0)
    gps = gps_samples(receiver.chosen, receiver.source, zero_s) if receiver.chosen else None
    lift = flight_axis(acceleration, gps, zero_s)
    return DecodedLog(
        format=LogFormat.ULOG,
        sha256=sha256,
        start_utc=start_utc(receiver.chosen, zero_s) if receiver.chosen else None,
        truncated=container.cut,
        time_steps_back=sum(recording.steps_back for recording in used),
        probe=probe_samples(probe, zero_s),
        static=static_samples(static, zero_s),
        temperature=temperature_samples(temperature, zero_s),
        gps=gps,
        attitude=attitude_samples(attitude, lift, zero_s),
        load_factor=load_factor_samples(acceleration, lift, zero_s),
        ground_contact=ground_contact_samples(found, gps, zero_s),
        sensors=_notes(choices, zero_s),
        gaps=_gaps(container.dropouts, used, zero_s),
    )


def _used(choices: Iterable[Choice]) -> list[Recording]:
    """The chosen recordings; the one that gives both pressure and temperature counts once."""
    by_origin: dict[tuple[str, int], Recording] = {}
    for choice in choices:
        if choice.chosen is not None:
            by_origin.setdefault((choice.chosen.topic.name, choice.chosen.instance), choice.chosen)
    return list(by_origin.values())


def _notes(choices: Iterable[Choice], zero_s: float) -> tuple[SensorNote, ...]:
    return tuple(
        replace(note, start_s=round(note.start_s - zero_s, 6), end_s=round(note.end_s - zero_s, 6))
        for choice in choices
        for note in choice.notes
    )


def _gaps(dropouts: Iterable[Dropout], used: Sequence[Recording], zero_s: float) -> tuple[ReadingGap, ...]:
    """The recorder's own losses. Their lengths can be absurd, so each ends at the latest where data go on."""
    gaps = []
    for dropout in dropouts:
        start, end = dropout.time_s, dropout.time_s + dropout.duration_s
        following = [float(time_s) for recording in used if (time_s := _next_after(recording, start)) is not None]
        if following and (end := min(end, *following)) > start >= zero_s:
            gaps.append(ReadingGap(round(start - zero_s, 6), round(end - zero_s, 6)))
    return tuple(gaps)


def _next_after(recording: Recording, time_s: float) -> float | None:
    index = int(np.searchsorted(recording.time_s, time_s, side="right"))
    return float(recording.time_s[index]) if index < recording.time_s.size else None

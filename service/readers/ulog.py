"""ULog -> decoded log."""

from collections.abc import Iterable, Sequence
from dataclasses import replace
from datetime import datetime
from pathlib import Path

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.codes import LogFormat
from service.domain.log import DecodedLog, GpsSamples, ReadingGap, SensorNote
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


def _decoded_log(container: Container, found: list[Recording], sha256: str) -> DecodedLog:
    choices = _choices(found)
    used = _used(choices.values())
    zero_s = min((float(recording.time_s[0]) for recording in used), default=0.0)
    steps_back = sum(recording.steps_back for recording in used)
    gaps = _gaps(container.dropouts, [recording.time_s for recording in used], zero_s)
    notes = _notes(choices.values(), zero_s)
    gps, utc = _gps_and_utc(choices.pop("gps"), zero_s)
    ground_contact = ground_contact_samples(found, gps, zero_s)
    lift = flight_axis(choices["load_factor"], gps, zero_s)
    # from here on a recording lives only until its stream is made
    used.clear()
    found.clear()
    return DecodedLog(
        format=LogFormat.ULOG,
        sha256=sha256,
        start_utc=utc,
        truncated=container.cut,
        time_steps_back=steps_back,
        load_factor=load_factor_samples(choices.pop("load_factor"), lift, zero_s),
        attitude=attitude_samples(choices.pop("attitude"), lift, zero_s),
        probe=probe_samples(choices.pop("probe"), zero_s),
        static=static_samples(choices.pop("static"), zero_s),
        temperature=temperature_samples(choices.pop("temperature"), zero_s),
        gps=gps,
        ground_contact=ground_contact,
        sensors=notes,
        gaps=gaps,
    )


def _gps_and_utc(choice: Choice, zero_s: float) -> tuple[GpsSamples | None, datetime | None]:
    if choice.chosen is None:
        return None, None
    return gps_samples(choice.chosen, choice.source, zero_s), start_utc(choice.chosen, zero_s)


def _choices(found: Sequence[Recording]) -> dict[str, Choice]:
    """Sensor -> which of its instances is used."""
    probe = choose_probe(found)
    return {
        "probe": probe,
        "static": choose_static(found),
        "temperature": choose_temperature(found, probe.chosen),
        "gps": choose("gps", of_topics(found, GPS_TOPICS), rate_gps),
        "attitude": choose_attitude(found),
        "load_factor": choose_acceleration(found),
    }


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


def _gaps(dropouts: Iterable[Dropout], times: Sequence[FloatArray], zero_s: float) -> tuple[ReadingGap, ...]:
    """The recorder's own losses. Their lengths can be absurd, so each ends at the latest where data go on."""
    gaps = []
    for dropout in dropouts:
        start = dropout.time_s
        following = [
            float(time_s[np.searchsorted(time_s, start, side="right")]) for time_s in times if time_s[-1] > start
        ]
        end = min(start + dropout.duration_s, *following) if following else start
        if end > start >= zero_s:
            gaps.append(ReadingGap(round(start - zero_s, 6), round(end - zero_s, 6)))
    return tuple(gaps)

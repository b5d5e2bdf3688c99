"""What a child is asked to do, and the words in which it answers: lines of JSON over one socket.

No pickles: the child reads logs that strangers made, so nothing it says is more than data.
"""

import dataclasses
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from enum import StrEnum
from typing import Any, Self

from service.domain.kept import Claim
from service.work.settings import WorkSettings


class Word(StrEnum):
    """The one key of each line."""

    PID = "pid"
    """Of the child, as its first word."""
    PROGRESS = "progress"
    """0 to 1."""
    DONE = "done"
    """The fields of an `Answer`."""
    WRONG = "wrong"
    """What is wrong with log or settings, for people."""
    FAILED = "failed"
    """What went wrong within, for people."""
    NO_MEMORY = "no_memory"
    NO_STORAGE = "no_storage"
    ENDED = "ended"
    """From the nursery, when the child is gone: its wait status."""


@dataclass(frozen=True, slots=True)
class Order:
    """One attempt at one reduction."""

    flight_id: str
    number: int
    log_sha256: str
    settings: Mapping[str, Any]
    """Of the request."""
    profile: Mapping[str, Any]
    """Of the aircraft; the settings are put over it (`schemas.aircraft.over_profile`)."""
    store: str = field(repr=False)
    spool: str
    seconds: float
    memory_bytes: int
    reducer: str

    def to_line(self) -> bytes:
        return json.dumps(dataclasses.asdict(self)).encode() + b"\n"

    @classmethod
    def from_line(cls, line: bytes) -> Self:
        return cls(**json.loads(line))


@dataclass(frozen=True, slots=True)
class Answer:
    """A result, in the terms of `JobQueue.finish`."""

    summary: Mapping[str, Any]
    """As `POST /v1/reductions` answers with `include=faults`: no series, the faults with their messages."""
    verdict: str
    log_speed_scale: float | None
    """ln of the total speed scale, so that flights with and without a factor loaded agree; None where refused."""
    log_speed_scale_uncertainty: float | None
    """Its standard uncertainty."""
    series_key: str
    method: str
    flown_utc: datetime | None


def order_of(claim: Claim, settings: WorkSettings) -> Order:
    return Order(
        flight_id=claim.flight_id,
        number=claim.number,
        log_sha256=claim.log_sha256,
        settings=claim.settings,
        profile=claim.request_aircraft_profile,
        store=settings.store,
        spool=settings.spool,
        seconds=settings.job_seconds,
        memory_bytes=settings.job_memory_bytes,
        reducer=settings.reducer,
    )


def answer_of(said: Mapping[str, Any]) -> Answer:
    """The answer in a line of `Word.DONE`."""
    flown = said["flown_utc"]
    return Answer(**{**said, "flown_utc": None if flown is None else datetime.fromisoformat(flown)})

"""What the service keeps: flights, their reductions, aircraft, keys. Frozen records, as the stores give them.

Times are aware and in UTC. Mappings hold JSON as it is on the wire.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from typing import Any


class JobState(StrEnum):
    """State of a reduction's job. On the wire a cancelled job shows as failed, with `failure` "cancelled"."""

    QUEUED = "queued"
    RUNNING = "running"
    DONE = "done"
    FAILED = "failed"
    CANCELLED = "cancelled"


class Scope(StrEnum):
    """What a key may do."""

    READ = "read"
    WRITE = "write"
    ADMIN = "admin"


@dataclass(frozen=True, slots=True)
class KeyRecord:
    """A key without its secret."""

    key_id: str
    owner: str
    label: str
    scopes: frozenset[Scope]
    created_utc: datetime
    revoked_utc: datetime | None


@dataclass(frozen=True, slots=True)
class AircraftRecord:
    owner: str
    name: str
    profile: Mapping[str, Any]
    """Settings of the aircraft: `aircraft`, `probe`, `warnings` as in a batch's settings."""
    version: int
    """From 1; grows with every change of profile or installation. The ETag."""
    installation_from_utc: datetime | None
    """The probe flies as it is installed now since then; earlier flights are out of the pool."""
    created_utc: datetime


@dataclass(frozen=True, slots=True)
class ReductionRecord:
    """One reduction of a flight with certain settings, and its job."""

    flight_id: str
    number: int
    """1 for the first, then counting up."""
    settings: Mapping[str, Any]
    """As the request gave them, without the aircraft's profile."""
    profile_version: int | None
    """Version of the aircraft whose profile was taken; None without an aircraft."""
    state: JobState
    attempts: int
    progress: float
    """0 to 1."""
    cancel_requested: bool
    failure: str | None
    """Why it failed, for people; "cancelled" when it was."""
    summary: Mapping[str, Any] | None
    """The answer without series; None until done."""
    verdict: str | None
    log_speed_scale: float | None
    """ln of the speed scale, for pooling."""
    log_speed_scale_uncertainty: float | None
    """Its standard uncertainty."""
    created_utc: datetime
    finished_utc: datetime | None
    series_key: str | None
    method: str | None
    stale: bool = False
    """The aircraft's profile has changed since this reduction took it."""


@dataclass(frozen=True, slots=True)
class FlightRecord:
    flight_id: str
    """26 characters of base 32 that sort by the time of adding."""
    owner: str
    aircraft: str | None
    log_sha256: str
    log_bytes: int
    log_media_type: str
    created_utc: datetime
    flown_utc: datetime
    """Start of the log, else when it was added."""
    duplicate_of: str | None
    """The first flight of the same owner and aircraft with the same log."""
    exclusion_reason: str | None
    """Why it is left out of the pool; None while it is not."""
    excluded_utc: datetime | None
    log_deleted_utc: datetime | None
    """When the log went by retention; the results stay."""
    latest: ReductionRecord
    """The one of the highest number, whatever its state."""
    done: ReductionRecord | None = None
    """The one of the highest number that is done: what the flight's parts and the pool show. None before."""


@dataclass(frozen=True, slots=True)
class NewFlight:
    """A flight to keep; its log is in the log store already."""

    log_sha256: str
    log_bytes: int
    log_media_type: str
    settings: Mapping[str, Any]
    aircraft: str | None = None
    flown_utc: datetime | None = None
    """Start of the log, if it is known before the reduction."""


@dataclass(frozen=True, slots=True)
class Claim:
    """A job in the hands of one worker. Only the holder of the newest fence may finish it."""

    flight_id: str
    number: int
    fence: int
    log_sha256: str
    log_media_type: str
    settings: Mapping[str, Any]
    request_aircraft_profile: Mapping[str, Any]
    """The aircraft's profile as it was when the reduction was asked for; empty without an aircraft."""


@dataclass(frozen=True, slots=True)
class PooledFlight:
    """A flight's part in the pooled factor of its aircraft."""

    flight_id: str
    flown_utc: datetime
    number: int
    log_speed_scale: float
    log_speed_scale_uncertainty: float
    method: str | None
    stale: bool

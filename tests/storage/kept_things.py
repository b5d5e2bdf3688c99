"""Things to keep, for the tests of the stores."""

import hashlib
import math
from datetime import UTC, datetime, timedelta
from typing import Any

from sqlalchemy import Engine

from service.domain.kept import Claim, FlightRecord, NewFlight
from service.storage.flights import FlightStore
from service.storage.jobs import JobQueue

OWNER = "north field"
OTHER = "south field"
FLOWN = datetime(2026, 5, 4, 9, 12, tzinfo=UTC)


def sha256_of(log: str) -> str:
    return hashlib.sha256(log.encode()).hexdigest()


def new_flight(log: str = "a log", **also: Any) -> NewFlight:
    given: dict[str, Any] = {"log_sha256": sha256_of(log), "log_bytes": 4096, "log_media_type": "text/csv"}
    return NewFlight(**given | {"settings": {}} | also)


def add_flight(engine: Engine, log: str = "a log", owner: str = OWNER, **also: Any) -> FlightRecord:
    return FlightStore(engine).add(owner, new_flight(log, **also))[0]


def claimed(engine: Engine, lease_s: float = 60.0) -> Claim:
    claim = JobQueue(engine).claim("a worker", lease_s)
    assert claim is not None
    return claim


def finish(engine: Engine, claim: Claim, scale: float = 0.94, verdict: str = "accepted", **also: Any) -> bool:
    """End a job with a result that is accepted unless `verdict` says otherwise."""
    values: dict[str, Any] = {
        "summary": {"calibration": {"verdict": verdict}},
        "verdict": verdict,
        "log_speed_scale": math.log(scale),
        "log_speed_scale_uncertainty": 0.004,
        "series_key": f"{claim.flight_id}-{claim.number}",
        "method": "1",
    }
    return JobQueue(engine).finish(claim, **values | also)


def add_result(
    engine: Engine, log: str, scale: float = 0.94, verdict: str = "accepted", days: float = 0.0, **also: Any
) -> FlightRecord:
    """A flight of some days after FLOWN whose first reduction is done."""
    flight = add_flight(engine, log, **also)
    claim = JobQueue(engine).claim("a worker", 60.0, only=(flight.flight_id, 1))
    assert claim is not None
    assert finish(engine, claim, scale, verdict, flown_utc=FLOWN + timedelta(days=days))
    return FlightStore(engine).get(flight.owner, flight.flight_id)

"""Several processes on one database, each with its own engine: every flight is made once, and every job done once."""

from collections import Counter
from itertools import chain
from typing import Any, cast

from sqlalchemy import URL, Engine

from service.domain.kept import JobState
from service.storage.flights import FlightStore
from tests.storage.kept_things import OWNER
from tests.storage.processes import at_once

PROCESSES, KEYS = 8, 10


def test_eight_processes_with_the_same_keys(engine: Engine, url: URL) -> None:
    told = cast(list[dict[str, Any]], at_once(PROCESSES, "add and work", url))
    by_key = [{flight_id for flight_id, _ in of_key} for of_key in zip(*(of["added"] for of in told), strict=True)]
    assert [len(flights) for flights in by_key] == [1] * KEYS
    assert sum(is_new for of in told for _, is_new in of["added"]) == KEYS
    kept = FlightStore(engine).list(OWNER).items
    assert {flight.flight_id for flight in kept} == set.union(*by_key)
    assert Counter(chain.from_iterable(of["done"] for of in told)) == Counter(flight.flight_id for flight in kept)
    assert {(flight.latest.state, flight.latest.attempts) for flight in kept} == {(JobState.DONE, 1)}

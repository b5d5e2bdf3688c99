"""Kept flights: add, list, look at, reduce again, cancel, leave out of the pool, give the log back, delete."""

from collections.abc import Iterator
from typing import Any, BinaryIO

from flask import Blueprint, Request, Response, request

from schemas.aircraft import instant
from schemas.flight import (
    WIRE_STATES,
    dump_answer,
    dump_flight,
    dump_flights,
    dump_kept_reduction,
    load_exclusion_reason,
)
from service.config import Config
from service.domain.codes import Verdict
from service.domain.errors import WrongValues
from service.domain.kept import JobState, ReductionRecord
from service.http.access import caller
from service.http.answers import json_answer, require_json_accepted
from service.http.conditions import revalidated
from service.http.failures import QueueFull
from service.http.flight_parts import add_parts, series_asked_for
from service.http.gate import Gate
from service.http.listing import limit_of, linked
from service.http.once import once_of
from service.http.preferences import Preference, preference_of, say_applied
from service.http.query import include_parts, require_known
from service.http.submission import received, received_json
from service.http.waiting import WaitingPlaces
from service.keeping import (
    CLOSED,
    Keeping,
    SentFlight,
    Stores,
    check_flight,
    delete_flight,
    keep_flight,
    reduce_again,
    wait_for,
)
from service.storage.errors import LogGone
from service.storage.flights import FlightFilters
from service.storage.idempotency import Once

URL = "/v1/flights"
FILTERS = ("aircraft", "verdict", "state", "from_utc", "to_utc")
QUEUE_FULL_S = 15
CHUNK_BYTES = 1024 * 1024


def kept_flights(config: Config, keeping: Keeping) -> Blueprint:
    blueprint = Blueprint("flights", __name__)
    gate = Gate(config.reductions_at_once, config.wait_s)
    # one thread stays free for those who ask how it goes
    waiting = WaitingPlaces(max(1, config.threads - 1), config.answer_wait_s)

    @blueprint.post(URL)
    def create() -> Response:
        require_json_accepted(request)
        require_known(request, ("include", "aircraft"))
        include, preference, kept = include_parts(request), preference_of(request), keeping.stores()
        aircraft = request.args.get("aircraft")
        with received(request, config) as submission:
            once = once_of(request, submission.sha256, submission.settings, aircraft)
            asked = _asked_before(kept, once)
            if asked is None:
                _require_room(kept, config)
                sent = SentFlight(submission.path, submission.sha256, submission.size, submission.settings, aircraft)
                with gate.turn():
                    checked = check_flight(kept, caller().owner, sent)
                asked = keep_flight(kept, caller().owner, checked, once=once, by=caller().key_id)[:2]
        return _answer_to_post(kept, *asked, preference, waiting, include, f"{URL}/{asked[0]}")

    @blueprint.get(URL)
    def index() -> Response:
        require_json_accepted(request)
        require_known(request, (*FILTERS, "limit", "cursor"))
        limit, cursor = limit_of(request), request.args.get("cursor")
        page = keeping.stores().flights.list(caller().owner, _filters(request), cursor=cursor, limit=limit)
        return linked(json_answer(dump_flights(page.items, page.next_cursor)), request, page.next_cursor)

    @blueprint.get(f"{URL}/<flight>")
    def show(flight: str) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        record = keeping.stores().flights.get(caller().owner, flight)
        return revalidated(json_answer(dump_flight(record)), request)

    @blueprint.delete(f"{URL}/<flight>")
    def delete(flight: str) -> Response:
        require_known(request, ())
        delete_flight(keeping.stores(), caller().owner, flight, by=caller().key_id)
        return Response(status=204)

    @blueprint.post(f"{URL}/<flight>/cancel")
    def cancel(flight: str) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        kept = keeping.stores()
        kept.jobs.cancel(caller().owner, flight, by=caller().key_id)
        return json_answer(dump_flight(kept.flights.get(caller().owner, flight)))

    @blueprint.put(f"{URL}/<flight>/exclusion")
    def exclude(flight: str) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        reason = load_exclusion_reason(received_json(request, config))
        record = keeping.stores().flights.exclude(caller().owner, flight, reason, by=caller().key_id)
        return json_answer(dump_flight(record))

    @blueprint.delete(f"{URL}/<flight>/exclusion")
    def readmit(flight: str) -> Response:
        require_known(request, ())
        keeping.stores().flights.readmit(caller().owner, flight, by=caller().key_id)
        return Response(status=204)

    @blueprint.get(f"{URL}/<flight>/log")
    def log(flight: str) -> Response:
        require_known(request, ())
        return _log_answer(keeping.stores(), flight)

    @blueprint.post(f"{URL}/<flight>/reductions")
    def reduce(flight: str) -> Response:
        require_json_accepted(request)
        require_known(request, ("include",))
        include, preference, kept = include_parts(request), preference_of(request), keeping.stores()
        settings = received_json(request, config)
        once = once_of(request, settings)
        asked = _asked_before(kept, once)
        if asked is None:
            kept.flights.get(caller().owner, flight)
            _require_room(kept, config)
            reduction, _ = reduce_again(kept, caller().owner, flight, settings, once=once, by=caller().key_id)
            asked = (flight, reduction.number)
        location = f"{URL}/{asked[0]}/reductions/{asked[1]}"
        return _answer_to_post(kept, *asked, preference, waiting, include, location)

    @blueprint.get(f"{URL}/<flight>/reductions")
    def versions(flight: str) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        found = keeping.stores().flights.reductions(caller().owner, flight)
        return json_answer({"items": [dump_kept_reduction(reduction) for reduction in found]})

    @blueprint.get(f"{URL}/<flight>/reductions/<int:number>")
    def version(flight: str, number: int) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        found = keeping.stores().flights.reduction(caller().owner, flight, number)
        return revalidated(json_answer(dump_kept_reduction(found)), request)

    add_parts(blueprint, keeping)
    return blueprint


def _asked_before(kept: Stores, once: Once | None) -> tuple[str, int] | None:
    """What an earlier request with this key made: looked up before anything else, so that a repeat is never refused."""
    return None if once is None else kept.flights.find_once(caller().owner, once)


def _require_room(kept: Stores, config: Config) -> None:
    if kept.jobs.depth() >= config.queue_limit:
        raise QueueFull("Too many flights wait for their reduction.", {"Retry-After": str(QUEUE_FULL_S)})


def _answer_to_post(
    kept: Stores,
    flight: str,
    number: int,
    preference: Preference,
    waiting: WaitingPlaces,
    include: frozenset[str],
    location: str,
) -> Response:
    """201 with the summary once the reduction is closed; 202 when it is not within the time to wait."""
    owner = caller().owner
    with waiting.place() as longest_s:
        reduction = wait_for(kept, owner, flight, number, preference.wait(longest_s))
    record = kept.flights.get(owner, flight)
    series = _series(kept, reduction, include)
    answer = json_answer(dump_answer(record, reduction, series, fault_messages="faults" in include))
    answer.status_code = 201 if reduction.state in CLOSED else 202
    if answer.status_code == 202:
        answer.headers["Retry-After"] = "1"
    answer.headers["Location"] = location
    return say_applied(answer, preference)


def _series(kept: Stores, reduction: ReductionRecord, include: frozenset[str]) -> dict[str, Any]:
    if reduction.state is not JobState.DONE:
        return {}
    return series_asked_for(kept, reduction, include)


def _filters(request: Request) -> FlightFilters:
    given = request.args
    return FlightFilters(
        aircraft=given.get("aircraft"),
        verdict=_one_of(request, "verdict", [str(verdict) for verdict in Verdict]),
        state=_state(request),
        from_utc=instant(given["from_utc"], "/from_utc") if "from_utc" in given else None,
        to_utc=instant(given["to_utc"], "/to_utc") if "to_utc" in given else None,
    )


def _state(request: Request) -> JobState | None:
    named = _one_of(request, "state", WIRE_STATES)
    return None if named is None else JobState(named)


def _one_of(request: Request, name: str, choices: Any) -> str | None:
    given = request.args.get(name)
    if given is not None and given not in choices:
        raise WrongValues("The query is wrong.", {f"/{name}": f"must be one of {', '.join(choices)}"})
    return given


def _log_answer(kept: Stores, flight: str) -> Response:
    record = kept.flights.get(caller().owner, flight)
    if record.log_deleted_utc is not None:
        raise LogGone("The log of this flight is no longer kept.")
    file = kept.logs.open(record.log_sha256)
    answer = Response(_chunks(file), mimetype=record.log_media_type, direct_passthrough=True)
    # also when nobody reads it: HEAD, or a client that left
    answer.call_on_close(file.close)
    answer.headers["Content-Length"] = str(record.log_bytes)
    answer.headers["Content-Disposition"] = f'attachment; filename="{flight}.{_suffix(record.log_media_type)}"'
    answer.headers["Cache-Control"] = "private, no-cache"
    answer.set_etag(record.log_sha256)
    return answer


def _chunks(file: BinaryIO) -> Iterator[bytes]:
    with file:
        while chunk := file.read(CHUNK_BYTES):
            yield chunk


def _suffix(media_type: str) -> str:
    return {"text/csv": "csv", "application/json": "json"}.get(media_type, "ulg")

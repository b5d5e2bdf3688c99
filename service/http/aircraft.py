"""Kept aircraft: profile, installation, and the factor pooled over their flights."""

from flask import Blueprint, Response, request

from schemas.aircraft import dump_aircraft, dump_aircraft_list, load_installation, load_profile
from schemas.pool import dump_pool
from service.config import Config
from service.domain.kept import AircraftRecord
from service.http.access import caller
from service.http.answers import json_answer, require_json_accepted
from service.http.conditions import expected_version, require_version, revalidated, tagged
from service.http.listing import limit_of, linked
from service.http.query import require_known
from service.http.submission import received_json
from service.keeping import Keeping, Stores, find_aircraft, pool_aircraft
from service.storage.texts import aircraft_name

URL = "/v1/aircraft"


def kept_aircraft(config: Config, keeping: Keeping) -> Blueprint:
    blueprint = Blueprint("aircraft", __name__)

    @blueprint.get(URL)
    def index() -> Response:
        require_json_accepted(request)
        require_known(request, ("limit", "cursor"))
        limit, cursor = limit_of(request), request.args.get("cursor")
        page = keeping.stores().aircraft.list(caller().owner, cursor=cursor, limit=limit)
        return linked(json_answer(dump_aircraft_list(page.items, page.next_cursor)), request, page.next_cursor)

    @blueprint.get(f"{URL}/<aircraft>")
    def show(aircraft: str) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        record = keeping.stores().aircraft.get(caller().owner, aircraft)
        return revalidated(_answer(record), request)

    @blueprint.put(f"{URL}/<aircraft>")
    def put(aircraft: str) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        kept, name = keeping.stores(), aircraft_name(aircraft)
        profile = load_profile(received_json(request, config))
        current = _version(kept, name)
        expected = require_version(expected_version(request, current), current)
        record, created = kept.aircraft.put(caller().owner, aircraft, profile, expected=expected, by=caller().key_id)
        answer = _answer(record)
        if created:
            answer.status_code = 201
            answer.headers["Location"] = request.path
        return answer

    @blueprint.put(f"{URL}/<aircraft>/installation")
    def installation(aircraft: str) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        kept = keeping.stores()
        current = kept.aircraft.get(caller().owner, aircraft).version
        from_utc = load_installation(received_json(request, config))
        expected = expected_version(request, current)
        return _answer(
            kept.aircraft.set_installation(caller().owner, aircraft, from_utc, expected=expected, by=caller().key_id)
        )

    @blueprint.get(f"{URL}/<aircraft>/calibration")
    def calibration(aircraft: str) -> Response:
        require_json_accepted(request)
        require_known(request, ())
        pooled = pool_aircraft(keeping.stores(), caller().owner, aircraft)
        answer = dump_pool(pooled.aircraft, pooled.flights, pooled.alone, pooled.assessment)
        return revalidated(json_answer(answer), request)

    return blueprint


def _version(kept: Stores, aircraft: str) -> int | None:
    found = find_aircraft(kept, caller().owner, aircraft)
    return None if found is None else found.version


def _answer(record: AircraftRecord) -> Response:
    return tagged(json_answer(dump_aircraft(record)), record.version)

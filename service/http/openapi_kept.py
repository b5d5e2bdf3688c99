"""The calls about kept flights and aircraft, for the OpenAPI document."""

from schemas.aircraft import ALL_AIRCRAFT_SCHEMAS
from schemas.flight import ALL_FLIGHT_SCHEMAS, WIRE_STATES
from schemas.pool import PoolSchema
from service.domain.codes import Verdict
from service.http.openapi_parts import (
    Json,
    answer_headers,
    empty_response,
    header,
    in_path,
    json_response,
    problems,
    query,
    reference,
    text_header,
)
from service.storage.pages import MOST_ITEMS

KEPT_SCHEMAS = (*ALL_FLIGHT_SCHEMAS, *ALL_AIRCRAFT_SCHEMAS, PoolSchema)

READ_PROBLEMS = (401, 403, 404, 406, 422, 500, 503)
WRITE_PROBLEMS = (400, 401, 403, 404, 406, 408, 413, 415, 422, 500, 503)
GONE_PROBLEMS = (401, 403, 404, 422, 500, 503)
SECURITY: list[Json] = [{}, {"key": []}]

FLIGHT = in_path("flight", "Id of a flight.", {"type": "string", "pattern": "^[0-7][0-9a-hjkmnp-tv-z]{25}$"})
AIRCRAFT = in_path("aircraft", "Name of an aircraft: printable, without `/`, without blanks at its ends.")
TIME: Json = {"type": "string", "format": "date-time"}
WHOLE: Json = {"type": "integer", "minimum": 1}
REDUCTION = query("reduction", "Number of an earlier reduction, instead of the newest that is done.", WHOLE)
IF_MATCH = header("If-Match", "ETag of the version that is to be replaced.")
IF_NONE_MATCH = header("If-None-Match", "ETag of what the client has: 304 if it is still so.")
ETAG = {"ETag": text_header("Version of what is shown.")}
LINK = {"Link": text_header("`first` and `next` page.")}
NOT_MODIFIED = empty_response("The client has it as it is.")
ONCE = header(
    "Idempotency-Key",
    "The same key with the same request again gives the same answer and does nothing twice, for a week, also while the "
    "first is under way; with another request: 409.",
)
PREFER = header(
    "Prefer",
    "`respond-async`: 202 at once. `wait=N`: wait for the result, N seconds at most (the server has its own limit).",
)
PAGE = [
    query("limit", "Items on a page.", {"type": "integer", "minimum": 1, "maximum": MOST_ITEMS, "default": 50}),
    query("cursor", "`next` of the page before.", {"type": "string"}),
]
SECONDS: Json = {"type": "number"}
SLICE = [
    query("from_s", "First time, inclusive [s].", SECONDS),
    query("to_s", "Last time, inclusive [s].", SECONDS),
    query(
        "step_s",
        "One sample a step [s]: the nearest to `from_s` (or the first sample) + k `step_s`, with the flags of all "
        "samples of its step; steps without samples are left out.",
        {"type": "number", "exclusiveMinimum": 0},
    ),
]
AFTER_POST = {
    "anyOf": [{"allOf": [reference("FlightState"), reference("Reduction")]}, reference("FlightState")],
    "description": "The flight with its summary; without it when the reduction failed or was cancelled.",
}
LOCATION = {"Location": text_header("Where it is from now on.")}


def kept_paths(bodies: Json, include: Json, headers: list[Json]) -> dict[str, Json]:
    """Path -> its operations.

    Parameters
    ----------
    bodies, include, headers : of a request that brings a log, as for a one-shot reduction.
    """
    return {
        "/v1/flights": {"post": _add(bodies, [include, *headers]), "get": _list()},
        "/v1/flights/{flight}": {
            "get": _read("showFlight", "State, provenance and summary of a flight", "Flight", [FLIGHT, IF_NONE_MATCH]),
            "delete": _delete("deleteFlight", "Delete a flight, its log and its results", [FLIGHT]),
        },
        "/v1/flights/{flight}/calibration": _part("Calibration", "The probe's scale", "FlightCalibration"),
        "/v1/flights/{flight}/wind": _part("Wind", "The wind", "FlightWind"),
        "/v1/flights/{flight}/faults": _part("Faults", "The faults of the sensors", "FlightFaults"),
        "/v1/flights/{flight}/airspeed": _series("Airspeed", "The airspeed series", "FlightAirspeed"),
        "/v1/flights/{flight}/stall-margins": _series("StallMargins", "The stall margins", "FlightStallMargins"),
        "/v1/flights/{flight}/log": {"get": _log()},
        "/v1/flights/{flight}/reductions": {"post": _reduce_again(include, headers), "get": _reductions()},
        "/v1/flights/{flight}/reductions/{number}": {
            "get": _read(
                "showReduction",
                "One reduction of a flight",
                "KeptReduction",
                [FLIGHT, in_path("number", "From 1.", WHOLE), IF_NONE_MATCH],
            )
        },
        "/v1/flights/{flight}/cancel": {"post": _cancel()},
        "/v1/flights/{flight}/exclusion": {
            "put": _put("excludeFlight", "Leave a flight out of the pool", "ExclusionReason", "Flight", [FLIGHT]),
            "delete": _delete("readmitFlight", "Take a flight back into the pool", [FLIGHT]),
        },
        "/v1/aircraft": {
            "get": _page("listAircraft", "Aircraft by name", "AircraftList", "aircraft", []),
        },
        "/v1/aircraft/{aircraft}": {
            "get": _read("showAircraft", "Profile of an aircraft", "Aircraft", [AIRCRAFT, IF_NONE_MATCH], "aircraft"),
            "put": _put_aircraft(),
        },
        "/v1/aircraft/{aircraft}/installation": {
            "put": _put(
                "setInstallation",
                "Begin a new pool: the probe is installed as it is since then",
                "Installation",
                "Aircraft",
                [AIRCRAFT, IF_MATCH],
                "aircraft",
                (412,),
                ETAG,
            )
        },
        "/v1/aircraft/{aircraft}/calibration": {
            "get": _read(
                "pooledCalibration",
                "The factor to load, pooled over the accepted flights of the installation",
                "PooledCalibration",
                [AIRCRAFT, IF_NONE_MATCH],
                "aircraft",
            )
        },
    }


def _operation(name: str, tag: str, summary: str, parameters: list[Json], responses: Json, **more: object) -> Json:
    return {
        "operationId": name,
        "tags": [tag],
        "summary": summary,
        "security": SECURITY,
        "parameters": parameters,
        **more,
        "responses": responses,
    }


def _add(bodies: Json, parameters: list[Json]) -> Json:
    aircraft = query(
        "aircraft",
        "Name of its aircraft, whose profile stands behind the settings; an unknown one is created.",
        {"type": "string", "minLength": 1, "maxLength": 100},
    )
    return _operation(
        "addFlight",
        "flights",
        "Keep a flight and reduce it",
        [*parameters, aircraft, ONCE, PREFER],
        {
            "201": json_response("Kept, and reduced or failed.", AFTER_POST, LOCATION),
            "202": json_response("Kept; its reduction is not done yet.", "FlightState", LOCATION),
            **problems((400, 401, 403, 406, 408, 409, 413, 415, 422, 500, 503)),
        },
        description=(
            "The body is as for a one-shot reduction. What cannot be read is refused and nothing is kept. The "
            "reduction is done by a worker (`loiterwise serve` and `loiterwise work` start them); without one it "
            "stays queued."
        ),
        requestBody={"required": True, "content": bodies},
    )


def _list() -> Json:
    filters = [
        query("aircraft", "Flights of this aircraft.", {"type": "string"}),
        query("verdict", "With this verdict.", {"type": "string", "enum": [str(verdict) for verdict in Verdict]}),
        query("state", "In this state.", {"type": "string", "enum": list(WIRE_STATES)}),
        query("from_utc", "Flown then or later.", TIME),
        query("to_utc", "Flown then or earlier.", TIME),
    ]
    return _page("listFlights", "Flights, the newest first", "Flights", "flights", filters)


def _page(name: str, summary: str, schema: str, tag: str, filters: list[Json]) -> Json:
    responses = {"200": json_response("A page.", schema, LINK), **problems((401, 403, 406, 422, 500, 503))}
    return _operation(name, tag, summary, [*filters, *PAGE], responses)


def _read(name: str, summary: str, schema: str, parameters: list[Json], tag: str = "flights") -> Json:
    responses = {"200": json_response(summary, schema, ETAG), "304": NOT_MODIFIED, **problems(READ_PROBLEMS)}
    return _operation(name, tag, summary, parameters, responses)


def _part(name: str, summary: str, schema: str) -> Json:
    return {"get": _read(f"flight{name}", f"{summary} of a flight", schema, [FLIGHT, REDUCTION, IF_NONE_MATCH])}


def _series(name: str, summary: str, schema: str) -> Json:
    answer = json_response(summary, schema)
    answer["content"]["text/csv"] = {
        "schema": {"type": "string", "description": "Cautions as `#` lines, a header, a row a sample."}
    }
    operation = _operation(
        f"flight{name}",
        "flights",
        f"{summary} of a flight, whole or in part",
        [FLIGHT, *SLICE, REDUCTION],
        {"200": answer, **problems(READ_PROBLEMS)},
    )
    return {"get": operation}


def _log() -> Json:
    log: Json = {"schema": {"description": "The log as it came."}}
    answer = {
        "description": "The bytes as they came, after any content coding was removed.",
        "headers": answer_headers() | ETAG,
        "content": dict.fromkeys(("application/octet-stream", "text/csv", "application/json"), log),
    }
    return _operation(
        "flightLog", "flights", "The log of a flight", [FLIGHT], {"200": answer, **problems((*GONE_PROBLEMS, 409))}
    )


def _reduce_again(include: Json, headers: list[Json]) -> Json:
    return _operation(
        "reduceAgain",
        "flights",
        "Reduce a flight again with other settings",
        [FLIGHT, include, *headers, ONCE, PREFER],
        {
            "201": json_response("Reduced, or failed.", AFTER_POST, LOCATION),
            "202": json_response("Not done yet.", "FlightState", LOCATION),
            **problems((*WRITE_PROBLEMS, 409)),
        },
        description="The whole settings, over those of the aircraft's profile as it is now. Earlier results stay.",
        requestBody={"required": True, "content": {"application/json": {"schema": reference("Settings")}}},
    )


def _reductions() -> Json:
    return _operation(
        "listReductions",
        "flights",
        "Every reduction of a flight",
        [FLIGHT],
        {"200": json_response("By number.", "KeptReductions"), **problems(READ_PROBLEMS)},
    )


def _cancel() -> Json:
    return _operation(
        "cancelReduction",
        "flights",
        "Cancel what is queued or running of a flight",
        [FLIGHT],
        {"200": json_response("The flight as it is then.", "Flight"), **problems(READ_PROBLEMS)},
        description="What is closed already stays as it is.",
    )


def _delete(name: str, summary: str, parameters: list[Json]) -> Json:
    return _operation(name, "flights", summary, parameters, {"204": empty_response("Done."), **problems(GONE_PROBLEMS)})


def _put(
    name: str,
    summary: str,
    body: str,
    answer: str,
    parameters: list[Json],
    tag: str = "flights",
    more_problems: tuple[int, ...] = (),
    headers: Json | None = None,
) -> Json:
    return _operation(
        name,
        tag,
        summary,
        parameters,
        {"200": json_response("As it is now.", answer, headers), **problems((*WRITE_PROBLEMS, *more_problems))},
        requestBody={"required": True, "content": {"application/json": {"schema": reference(body)}}},
    )


def _put_aircraft() -> Json:
    changed = _put("putAircraft", "Set the profile of an aircraft", "AircraftProfile", "Aircraft", [], "aircraft")
    none_match = header("If-None-Match", "`*`: only if there is none yet.")
    return changed | {
        "parameters": [AIRCRAFT, IF_MATCH, none_match],
        "description": (
            "A new aircraft needs no condition; to change one, its ETag goes into `If-Match`. Fields that only the "
            "service writes are taken back unread. Results that took another profile are `stale` from then on."
        ),
        "responses": {
            "201": json_response("Created.", "Aircraft", ETAG | LOCATION),
            **changed["responses"],
            **problems((412, 428)),
        },
    }

"""The OpenAPI 3.1 document, made from the marshmallow schemas."""

import json
import re
from functools import cache
from typing import Any

from apispec import APISpec
from apispec.ext.marshmallow import MarshmallowPlugin
from marshmallow import Schema

from schemas.batch import VELOCITY, BatchSchema
from schemas.health import LiveSchema, ReadySchema
from schemas.parts import PARTS
from schemas.problem import ProblemSchema
from schemas.reduction import ReductionSchema
from service.http.errors import INTERNAL, KINDS, Kind
from service.http.openapi_kept import KEPT_SCHEMAS, kept_paths
from service.http.openapi_parts import Json, answer_headers, json_response, problem_response, problems, response_name
from service.version import SERVICE

DESCRIPTION = """\
Turns a flight (pressures and GPS velocity of loiter circles or legs) into an airspeed with its true uncertainty, the
scale of the airspeed probe, the wind, stall-margin warnings and the faults of the sensors.

Every numeric field carries its unit in its name; SI throughout, angles in degrees. A missing number is `null`.
A flight that holds no calibration is no error: the verdict is `refused` and the reasons are given. Advisory only:
never a stall-warning device.
"""

STATUS_WORDS = {
    400: "Unreadable: no log, table or batch, broken JSON (also a `NaN` token), a body cut short.",
    401: "No key, or one that is not known.",
    403: "The key's scopes leave this call out.",
    404: "There is no such thing, or it is another owner's; or there is no result yet.",
    405: "The method is not allowed here; `Allow` says which are.",
    406: "`Accept` leaves out every form of the answer.",
    408: "The upload was too slow.",
    409: "The idempotency key came before with another request; or the log is no longer kept.",
    412: "`If-Match` or `If-None-Match` does not hold: it has been changed.",
    413: "The body, or what it decodes to, is too large.",
    415: "A media type or content coding that is not read; `Accept-Post` or `Accept-Encoding` says which are.",
    422: "Read, but values are wrong; `errors` says where.",
    428: "It exists already: a change needs its ETag as `If-Match`.",
    500: "The service failed; its log holds the request's id.",
    503: (
        "Too much work at once, a full queue, no room, a database out of reach: `Retry-After` says when to come again. "
        "Or this server keeps no flights."
    ),
}
READ_STRICTLY = frozenset({"ExclusionReason", "Installation"})
"""Further bodies that take no unknown fields."""
REDUCTION_PROBLEMS = (400, 401, 403, 406, 408, 413, 415, 422, 500, 503)


def problem_kinds() -> list[Kind]:
    """Every kind of problem, in order of status."""
    return sorted([*KINDS.values(), INTERNAL])


@cache
def openapi_document() -> Json:
    """The whole document as a plain dict."""
    marshmallow = MarshmallowPlugin(schema_name_resolver=_schema_name)
    spec = APISpec("Loiterwise", SERVICE, "3.1.0", plugins=[marshmallow], info={"description": DESCRIPTION})
    for schema in (ReductionSchema, BatchSchema, ProblemSchema, LiveSchema, ReadySchema, *KEPT_SCHEMAS):
        # one that another holds is registered with it
        if _schema_name(schema) not in spec.components.schemas:
            spec.components.schema(_schema_name(schema), schema=schema)
    for status, words in STATUS_WORDS.items():
        spec.components.response(response_name(status), problem_response(words))
    spec.components.security_scheme(
        "key", {"type": "http", "scheme": "bearer", "description": "Needed only where the server is set to `keys`."}
    )
    spec.path("/v1/reductions", operations={"post": _create_reduction()})
    for path, operations in kept_paths(_bodies(), _include_parameter(), _header_parameters()).items():
        spec.path(path, operations=operations)
    spec.path("/v1/health/live", operations={"get": _read("Is the process alive?", "live", "Live", "health")})
    spec.path(
        "/v1/health/ready", operations={"get": _read("Can it take work?", "ready", "Ready", "health", also=(503,))}
    )
    spec.path("/v1/openapi.json", operations={"get": _openapi_operation()})
    spec.path("/docs", operations={"get": _page("This document for people.", "docs")})
    spec.path("/", operations={"get": _page("Where to begin.", "index")})
    return _finished(spec.to_dict())


def _schema_name(schema: Any) -> str:
    cls = schema if isinstance(schema, type) else type(schema)
    assert issubclass(cls, Schema)
    return str(cls.Meta.title)  # type: ignore[attr-defined]


def _create_reduction() -> Json:
    return {
        "operationId": "reduce",
        "tags": ["reductions"],
        "summary": "Reduce a flight",
        "description": (
            "One shot: a log or batch in, the whole result out, nothing kept. The format is found from the bytes, not "
            "from the media type. `Content-Encoding: gzip` is read. Settings come inside a batch, or as the part "
            "`settings` of a multipart body, which then replaces a batch's own."
        ),
        "security": [{}, {"key": []}],
        "parameters": [_include_parameter(), *_header_parameters()],
        "requestBody": {"required": True, "content": _bodies()},
        "responses": {
            "200": json_response("The answer, also when the verdict is `refused`.", "Reduction"),
            **problems(REDUCTION_PROBLEMS),
        },
    }


def _bodies() -> Json:
    log = {"description": "A log, CSV or JSON batch."}
    parts = {"log": log, "settings": {"$ref": "#/components/schemas/Settings"}}
    return {
        "application/octet-stream": {"schema": {"description": "A log, CSV or JSON batch, found from its bytes."}},
        "text/csv": {
            "schema": {
                "type": "string",
                "description": "One column `time_s` and the columns of a batch; a blank cell means no sample.",
            }
        },
        "application/json": {"schema": {"$ref": "#/components/schemas/Batch"}},
        "multipart/form-data": {
            "schema": {
                "type": "object",
                "description": "Part `log`: a log, CSV or JSON batch. Part `settings`: JSON as of the schema Settings.",
                "required": ["log"],
                "properties": parts,
                "additionalProperties": False,
            },
            "encoding": {
                "log": {"contentType": "application/octet-stream"},
                "settings": {"contentType": "application/json"},
            },
        },
    }


def _include_parameter() -> Json:
    return {
        "name": "include",
        "in": "query",
        "description": (
            "Parts to add to the summary, comma-separated: `airspeed` and `stall_margins` add the series, `faults` "
            "adds the finding in words to each fault. Other parameters, and this one twice, are refused (422)."
        ),
        "style": "form",
        "explode": False,
        "schema": {"type": "array", "items": {"type": "string", "enum": list(PARTS)}},
    }


def _header_parameters() -> list[Json]:
    coding = {"type": "string", "enum": ["gzip", "identity"]}
    return [
        {"name": "Content-Encoding", "in": "header", "description": "Coding of the body.", "schema": coding},
        _request_id_parameter(),
    ]


def _request_id_parameter() -> Json:
    return {
        "name": "X-Request-Id",
        "in": "header",
        "description": "Id for the server's log, echoed; replaced unless it is 1 to 64 of A-Z a-z 0-9 . _ -",
        "schema": {"type": "string"},
    }


def _read(summary: str, operation: str, schema: str, tag: str, also: tuple[int, ...] = ()) -> Json:
    return {
        "operationId": operation,
        "tags": [tag],
        "summary": summary,
        "responses": {"200": json_response(summary, schema), **problems((*also, 500))},
    }


def _openapi_operation() -> Json:
    content = {"application/json": {"schema": {"type": "object", "description": "An OpenAPI 3.1 document."}}}
    answer = {"description": "The document.", "headers": answer_headers(), "content": content}
    return {
        "operationId": "openapi",
        "tags": ["documentation"],
        "summary": "This document.",
        "responses": {"200": answer, **problems((500,))},
    }


def _page(summary: str, operation: str) -> Json:
    content = {"text/html": {"schema": {"type": "string"}}}
    return {
        "operationId": operation,
        "tags": ["documentation"],
        "summary": summary,
        "responses": {
            "200": {"description": "A page without scripts.", "headers": answer_headers(), "content": content},
            **problems((500,)),
        },
    }


def _finished(document: Json) -> Json:
    """What apispec does not say: which columns of the GPS go together, and that what we read knows no other fields."""
    schemas = document["components"]["schemas"]
    schemas["BatchGps"]["anyOf"] = [
        {"required": list(pair), "properties": {name: {"type": "array"} for name in pair}} for pair in VELOCITY
    ]
    for name in _reached(schemas, "Batch") | READ_STRICTLY:
        schemas[name]["additionalProperties"] = False
    return document


def _reached(schemas: Json, start: str) -> set[str]:
    """Names of the schemas that `start` is made of, itself among them."""
    found, waiting = set(), [start]
    while waiting:
        name = waiting.pop()
        if name not in found:
            found.add(name)
            waiting += re.findall(r"#/components/schemas/(\w+)", json.dumps(schemas[name]))
    return found

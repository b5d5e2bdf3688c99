"""What every answer must be, whatever was sent."""

import json
import re
from functools import cache
from typing import Any

import jsonschema
from flask.testing import FlaskClient
from werkzeug.test import TestResponse

from service.http.openapi import openapi_document
from tests.hostile.cases import Case

ALLOWED = frozenset({200, 400, 413, 415, 422})
PROBLEM_FIELDS = {"type", "title", "status", "detail", "request_id"}
LONGEST_PROBLEM = 64 * 1024
ESTIMATES = ("speed_scale", "pressure_scale", "total_speed_scale", "zero_offset_pa", "gps_delay_s")


def send(client: FlaskClient, case: Case) -> TestResponse:
    """Post the case's body as it is."""
    return client.post(case.url, data=case.body, headers=dict(case.headers))


def judge(answer: TestResponse) -> dict[str, Any]:
    """Assert that an answer is one of the contract's; returns it decoded."""
    assert answer.status_code in ALLOWED, answer.status_code
    document: dict[str, Any] = json.loads(answer.data.decode("utf-8"), parse_constant=_refuse_token)
    if answer.status_code == 200:
        _judge_reduction(answer, document)
    else:
        _judge_problem(answer, document)
    return document


def _refuse_token(token: str) -> None:
    raise AssertionError(f"{token} is not JSON")


def _judge_problem(answer: TestResponse, problem: dict[str, Any]) -> None:
    assert answer.mimetype == "application/problem+json"
    assert len(answer.data) < LONGEST_PROBLEM
    assert set(problem) - {"errors"} == PROBLEM_FIELDS
    assert problem["status"] == answer.status_code
    assert problem["request_id"] == answer.headers["X-Request-Id"]
    assert re.fullmatch(r"/docs#problem-[a-z-]+", problem["type"])
    assert problem["title"]
    assert problem["detail"]
    assert all(pointer == "" or pointer.startswith("/") for pointer in problem.get("errors", {}))
    assert all(problem.get("errors", {}).values())


def _judge_reduction(answer: TestResponse, document: dict[str, Any]) -> None:
    assert answer.mimetype == "application/json"
    # validating a series of thousands would take seconds; its parts are checked by their lengths
    summary = {name: part for name, part in document.items() if name not in ("airspeed", "stall_margins")}
    error = next(iter(_reduction_schema().iter_errors(summary)), None)
    assert error is None, error.message
    for name in ("airspeed", "stall_margins"):
        series = document.get(name)
        if series is not None:
            assert len({len(column) for column in series.values() if isinstance(column, list)}) == 1, name
    calibration = document["calibration"]
    if calibration["verdict"] == "refused":
        assert calibration["reasons"]
        assert calibration["speed_scale"] is None
    else:
        _judge_estimates(calibration)


def _judge_estimates(calibration: dict[str, Any]) -> None:
    assert calibration["speed_scale"]["value"] > 0.0
    for name in ESTIMATES:
        if calibration[name] is not None:
            low, high = calibration[name]["interval_95"]
            assert calibration[name]["standard_uncertainty"] >= 0.0, name
            assert low <= calibration[name]["value"] <= high, name


@cache
def _reduction_schema() -> jsonschema.Draft202012Validator:
    components = openapi_document()["components"]
    schemas = components["schemas"]
    required = [name for name in schemas["Reduction"]["required"] if name not in ("airspeed", "stall_margins")]
    relaxed = schemas | {"Reduction": schemas["Reduction"] | {"required": required}}
    return jsonschema.Draft202012Validator(
        {"$ref": "#/components/schemas/Reduction", "components": {"schemas": relaxed}}
    )

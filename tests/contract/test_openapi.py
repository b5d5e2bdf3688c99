"""The published document: valid, complete, and true of the answers."""

import json
import re
import tempfile
from pathlib import Path
from typing import Any

import jsonschema
import pytest
import schemathesis
from flask.testing import FlaskClient
from hypothesis import HealthCheck, settings
from openapi_spec_validator import validate
from schemathesis.checks import load_all_checks
from schemathesis.specs.openapi.checks import positive_data_acceptance

from schemas.reduction import dump_reduction
from schemas.wire import encode
from service.app import create_app
from service.config import Config
from service.domain import codes
from service.domain.results import Reduction
from service.http.openapi import openapi_document
from tests import made

load_all_checks()

SCHEMAS: dict[str, Any] = openapi_document()["components"]["schemas"]


def test_it_is_valid(client: FlaskClient) -> None:
    document = client.get("/v1/openapi.json").get_json()
    assert document["openapi"] == "3.1.0"
    validate(document)


def test_it_names_every_call_and_no_other() -> None:
    app = create_app(Config())
    routes = {
        (re.sub(r"<(?:int:)?(\w+)>", r"{\1}", rule.rule), method.lower())
        for rule in app.url_map.iter_rules()
        for method in (rule.methods or set()) - {"HEAD", "OPTIONS"}
        if rule.endpoint != "static"
    }
    documented = {(path, method) for path, methods in openapi_document()["paths"].items() for method in methods}
    assert documented == routes


def validator(name: str) -> jsonschema.Draft202012Validator:
    return jsonschema.Draft202012Validator({"$ref": f"#/components/schemas/{name}", "components": {"schemas": SCHEMAS}})


@pytest.mark.parametrize("reduction", [made.reduction(), made.refused_reduction()])
@pytest.mark.parametrize("include", [(), ("airspeed", "stall_margins", "faults")])
def test_answers_are_what_it_says(reduction: Reduction, include: tuple[str, ...]) -> None:
    document = json.loads(encode(dump_reduction(reduction, include)))
    validator("Reduction").validate(document)
    unknown = set(document) - set(SCHEMAS["Reduction"]["properties"])
    assert unknown == set()


def test_a_batch_of_ours_is_what_it_says() -> None:
    validator("Batch").validate(made.batch())


@pytest.mark.parametrize(
    "change",
    [
        {"gps": {"time_s": []}},
        {"probe": {"time_s": []}},
        {"probe": {"time_s": [None], "impact_pressure_pa": [1]}},
        {"probe": {"time_s": [True], "impact_pressure_pa": [1]}},
        {"rudder": {}},
        {"settings": {"wings": 2}},
        {"settings": {"aircraft": {"mass_kg": 0}}},
    ],
)
def test_it_refuses_what_the_service_refuses(client: FlaskClient, change: dict[str, Any]) -> None:
    batch = made.batch() | change
    assert not validator("Batch").is_valid(batch)
    assert client.post("/v1/reductions", json=batch).status_code == 422


@pytest.mark.parametrize(
    ("listed", "where"),
    [
        (codes.Verdict, ("Calibration", "verdict")),
        (codes.ZeroOffsetSource, ("Calibration", "zero_offset_source")),
        (codes.Reason, ("Reason", "code")),
        (codes.Direction, ("Loiter", "direction")),
        (codes.Level, ("StallWarning", "level")),
        (codes.FaultKind, ("Fault", "fault")),
        (codes.LogFormat, ("Inputs", "format")),
        (codes.CAUTIONS, ("Caution", "code")),
    ],
)
def test_closed_lists_are_enumerated(listed: Any, where: tuple[str, str]) -> None:
    schema, field = where
    assert SCHEMAS[schema]["properties"][field]["enum"] == [str(code) for code in listed]


@pytest.mark.parametrize("series", ["AirspeedSeries", "StallMarginSeries"])
def test_flags_are_enumerated(series: str) -> None:
    names = SCHEMAS[series]["properties"]["flags"]["items"]["items"]["enum"]
    assert names == [str(flag.name).lower() for flag in codes.Flag]


def test_everything_is_described() -> None:
    for name, schema in SCHEMAS.items():
        assert schema["description"], name
        for field, entry in schema["properties"].items():
            assert "description" in entry or "$ref" in entry or entry["anyOf"], (name, field)


def test_every_error_of_every_call_is_a_problem() -> None:
    document = openapi_document()
    for methods in document["paths"].values():
        for operation in methods.values():
            for status, answer in operation["responses"].items():
                if int(status) >= 400:
                    named = document["components"]["responses"][answer["$ref"].rpartition("/")[2]]
                    assert list(named["content"]) == ["application/problem+json"]


# its own folder of kept flights, gone with the process
_folder = tempfile.TemporaryDirectory(prefix="loiterwise-made-up-")
_config = Config(data=Path(_folder.name), log_level="ERROR", answer_wait_s=0.0, queue_limit=1_000_000)
_fuzzed = schemathesis.openapi.from_wsgi("/v1/openapi.json", create_app(_config))


@_fuzzed.parametrize()
@settings(max_examples=25, deadline=None, suppress_health_check=list(HealthCheck), derandomize=True)
def test_made_up_requests(case: "schemathesis.Case[Any]") -> None:
    """Whatever is sent, the answer is one that the document promises.

    More of it against a running server (`loiterwise serve`):

        schemathesis run http://127.0.0.1:8000/v1/openapi.json --exclude-checks positive_data_acceptance -n 1000

    The one check left out wants every body that fits its schema accepted: no schema says that bytes are a log, or that
    times increase.
    """
    case.call_and_validate(excluded_checks=[positive_data_acceptance])

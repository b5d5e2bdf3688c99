"""The parts of a kept flight: what they hold, slices, CSV beside JSON, cautions in each."""

import csv
import io
import json
from pathlib import Path
from typing import Any

import pytest

from service.domain.codes import CAUTIONS
from tests import made
from tests.contract.conftest import FLIGHTS, KeptClient
from tests.contract.test_openapi import validator

ROOT = Path(__file__).parents[2]
SERIES = ("airspeed", "stall-margins")
PARTS = {
    "calibration": "FlightCalibration",
    "wind": "FlightWind",
    "faults": "FlightFaults",
    "airspeed": "FlightAirspeed",
    "stall-margins": "FlightStallMargins",
}


@pytest.fixture(scope="module")
def flight(kept: KeptClient) -> str:
    """A sample flight with stall margins and warnings."""
    return kept.added(json.loads((ROOT / "samples/survey.json").read_text()))


@pytest.fixture(scope="module")
def whole(kept: KeptClient, flight: str) -> dict[str, Any]:
    """The same from a one-shot request."""
    url = "/v1/reductions?include=airspeed,stall_margins,faults"
    answer: dict[str, Any] = kept.client.post(url, data=kept.client.get(f"{FLIGHTS}/{flight}/log").data).get_json()
    return answer


def as_csv(kept: KeptClient, path: str) -> tuple[list[str], list[dict[str, Any]]]:
    """Comment lines, and rows with numbers, None for blank cells and flags as lists."""
    answer = kept.client.get(f"{FLIGHTS}/{path}", headers={"Accept": "text/csv"})
    assert answer.status_code == 200, answer.text
    assert answer.mimetype == "text/csv"
    lines = answer.text.splitlines()
    comments = [line for line in lines if line.startswith("#")]
    rows = list(csv.DictReader(io.StringIO("\n".join(lines[len(comments) :]))))
    read = [
        {name: cell.split() if name == "flags" else float(cell) if cell else None for name, cell in row.items()}
        for row in rows
    ]
    return comments, read


def rows_of(document: dict[str, Any], names: Any) -> list[dict[str, Any]]:
    return [dict(zip(names, values, strict=True)) for values in zip(*(document[name] for name in names), strict=True)]


def test_parts_are_those_of_the_whole_answer(kept: KeptClient, flight: str, whole: dict[str, Any]) -> None:
    calibration = kept.get(f"{flight}/calibration")
    assert {name: calibration[name] for name in whole["calibration"]} == whole["calibration"]
    wind = kept.get(f"{flight}/wind")
    assert {name: wind[name] for name in whole["wind"]} == whole["wind"]
    assert wind["loiters"] == whole["loiters"]
    assert kept.get(f"{flight}/faults")["faults"] == whole["faults"]
    for part, name in (("airspeed", "airspeed"), ("stall-margins", "stall_margins")):
        shown = kept.get(f"{flight}/{part}")
        assert {column: shown[column] for column in whole[name]} == whole[name]
    assert kept.get(f"{flight}/stall-margins")["stall_warnings"] == whole["stall_warnings"]


@pytest.mark.parametrize("part", PARTS)
def test_each_is_as_published_and_carries_the_cautions(kept: KeptClient, flight: str, part: str) -> None:
    document = kept.get(f"{flight}/{part}")
    validator(PARTS[part]).validate(document)
    assert {caution["code"]: caution["message"] for caution in document["cautions"]} == CAUTIONS
    assert (document["flight"], document["reduction"], document["stale"]) == (flight, 1, False)
    assert set(document["version"]) == {"service", "method"}


def test_the_flight_is_as_published(kept: KeptClient, flight: str) -> None:
    validator("Flight").validate(kept.get(flight))
    validator("Flights").validate(kept.client.get(FLIGHTS).get_json())
    validator("KeptReductions").validate(kept.get(f"{flight}/reductions"))


@pytest.mark.parametrize("part", SERIES)
@pytest.mark.parametrize(
    "query",
    ["", "?from_s=100&to_s=101.5", "?step_s=5", "?from_s=100.03&to_s=140&step_s=0.25", "?from_s=1e9", "?to_s=-5"],
)
def test_csv_holds_what_json_holds(kept: KeptClient, flight: str, part: str, query: str) -> None:
    document = kept.get(f"{flight}/{part}{query}")
    comments, rows = as_csv(kept, f"{flight}/{part}{query}")
    names = [
        name for name in document if isinstance(document[name], list) and name not in ("cautions", "stall_warnings")
    ]
    assert rows == rows_of(document, names)
    assert (rows == []) is ("1e9" in query or "-5" in query)
    for code, message in CAUTIONS.items():
        assert f"# caution {code}: {message}" in comments


@pytest.mark.parametrize("part", SERIES)
def test_ends_are_inclusive(kept: KeptClient, flight: str, part: str) -> None:
    every = kept.get(f"{flight}/{part}")
    times = every["time_s"]
    start, end = times[100], times[350]
    piece = kept.get(f"{flight}/{part}?from_s={start!r}&to_s={end!r}")
    assert piece["time_s"] == times[100:351]
    assert piece["flags"] == every["flags"][100:351]


def test_steps_join_the_flags(kept: KeptClient, flight: str) -> None:
    every = kept.get(f"{flight}/airspeed?from_s=0&to_s=100")
    stepped = kept.get(f"{flight}/airspeed?from_s=0&to_s=100&step_s=10")
    assert [round(time / 10) for time in stepped["time_s"]] == list(range(11))
    for centre, time_s, flags in zip(range(0, 101, 10), stepped["time_s"], stepped["flags"], strict=True):
        near = [index for index, time in enumerate(every["time_s"]) if centre - 5 <= time < centre + 5]
        assert abs(time_s - centre) == min(abs(every["time_s"][index] - centre) for index in near)
        assert set(flags) == {flag for index in near for flag in every["flags"][index]}


def test_no_stall_margins_without_a_stall_speed(kept: KeptClient) -> None:
    bare = kept.added()
    document = kept.get(f"{bare}/stall-margins")
    assert document["time_s"] == document["margin"] == []
    assert document["stall_margins_absent"]
    comments, rows = as_csv(kept, f"{bare}/stall-margins")
    assert rows == []
    assert comments


@pytest.mark.parametrize(
    ("query", "pointer"),
    [
        ("from_s=nan", "/from_s"),
        ("to_s=inf", "/to_s"),
        ("from_s=", "/from_s"),
        ("from_s=1_0", "/from_s"),
        ("step_s=0", "/step_s"),
        ("step_s=-1", "/step_s"),
        ("reduction=0", "/reduction"),
        ("reduction=x", "/reduction"),
        ("rate=1", "/rate"),
        ("from_s=1&from_s=2", "/from_s"),
    ],
)
def test_a_wrong_query(kept: KeptClient, flight: str, query: str, pointer: str) -> None:
    answer = kept.client.get(f"{FLIGHTS}/{flight}/airspeed?{query}")
    assert answer.status_code == 422
    assert set(answer.get_json()["errors"]) == {pointer}


@pytest.mark.parametrize(
    ("accept", "media_type"),
    [
        ("*/*", "application/json"),
        ("application/json", "application/json"),
        ("text/csv", "text/csv"),
        ("text/csv;q=0.5, application/json;q=0.1", "text/csv"),
        ("text/html, text/*;q=0.5", "text/csv"),
    ],
)
def test_the_form_that_is_accepted(kept: KeptClient, flight: str, accept: str, media_type: str) -> None:
    answer = kept.client.get(f"{FLIGHTS}/{flight}/airspeed?to_s=1", headers={"Accept": accept})
    assert (answer.status_code, answer.mimetype) == (200, media_type)
    assert "Accept" in answer.headers["Vary"]


@pytest.mark.parametrize("path", ["", "/calibration", "/airspeed", "/stall-margins"])
def test_no_acceptable_form(kept: KeptClient, flight: str, path: str) -> None:
    assert kept.client.get(f"{FLIGHTS}/{flight}{path}", headers={"Accept": "text/html"}).status_code == 406


def test_what_is_not_reduced_yet(kept: KeptClient) -> None:
    queued = kept.add(made.batch(turns=4)).get_json()["flight"]
    for part in PARTS:
        answer = kept.client.get(f"{FLIGHTS}/{queued}/{part}")
        assert (answer.status_code, answer.get_json()["type"]) == (404, "/docs#problem-no-result")
        assert int(answer.headers["Retry-After"]) > 0
    kept.run_jobs()
    assert kept.get(f"{queued}/wind")
    assert kept.client.get(f"{FLIGHTS}/{queued}/wind?reduction=2").status_code == 404


def test_a_refused_flight_has_its_series(kept: KeptClient) -> None:
    refused = kept.added(json.loads((ROOT / "samples/half_circle.json").read_text()))
    assert kept.get(refused)["verdict"] == "refused"
    assert kept.get(f"{refused}/calibration")["speed_scale"] is None
    assert all("uncalibrated" in flags for flags in kept.get(f"{refused}/airspeed")["flags"])

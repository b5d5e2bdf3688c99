"""Kept aircraft on the wire: profiles with versions, installations, the pooled factor."""

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from werkzeug.test import TestResponse

from service.domain.codes import CAUTIONS
from tests.contract.conftest import FLIGHTS, KeptClient
from tests.contract.test_openapi import validator

URL = "/v1/aircraft"
PROFILE = {
    "aircraft": {"reference_mass_kg": 6.0, "configurations": [{"name": "clean", "stall_speed_mps": 11.0}]},
    "probe": {"zero_offset_pa": 0.8},
}


def put(kept: KeptClient, name: str, profile: Any = PROFILE, **headers: str) -> TestResponse:
    named = {header.replace("_", "-"): value for header, value in headers.items()}
    return kept.client.put(f"{URL}/{name}", json=profile, headers=named)


def test_a_profile_is_made_shown_and_changed(kept: KeptClient) -> None:
    created = put(kept, "kite")
    assert (created.status_code, created.headers["ETag"], created.headers["Location"]) == (201, '"1"', f"{URL}/kite")
    shown = kept.client.get(f"{URL}/kite")
    assert (shown.status_code, shown.headers["ETag"]) == (200, '"1"')
    document = shown.get_json()
    validator("Aircraft").validate(document)
    assert {name: document[name] for name in PROFILE} == PROFILE
    changed = put(kept, "kite", {**document, "probe": {"zero_offset_pa": 1.0}}, If_Match='"1"')
    assert (changed.status_code, changed.headers["ETag"]) == (200, '"2"')
    assert changed.get_json()["probe"] == {"zero_offset_pa": 1.0}
    assert put(kept, "kite", changed.get_json(), If_Match='"2"').headers["ETag"] == '"2"'


@pytest.mark.parametrize(
    ("headers", "status", "kind"),
    [
        ({}, 428, "if-match-needed"),
        ({"If_Match": '"7"'}, 412, "precondition-failed"),
        ({"If_Match": 'W/"1"'}, 412, "precondition-failed"),
        ({"If_None_Match": "*"}, 412, "precondition-failed"),
    ],
)
def test_what_exists_is_not_changed_blindly(kept: KeptClient, headers: dict[str, str], status: int, kind: str) -> None:
    put(kept, "guarded")
    answer = put(kept, "guarded", {}, **headers)
    assert (answer.status_code, answer.get_json()["type"]) == (status, f"/docs#problem-{kind}")
    assert kept.client.get(f"{URL}/guarded").get_json()["version"] == 1


def test_only_if_there_is_none(kept: KeptClient) -> None:
    assert put(kept, "new", If_Match="*").status_code == 412
    assert put(kept, "new", If_None_Match="*").status_code == 201


def test_two_who_have_seen_the_same(kept: KeptClient) -> None:
    put(kept, "shared")
    assert put(kept, "shared", {"probe": {"zero_offset_pa": 2}}, If_Match='"1"').status_code == 200
    assert put(kept, "shared", {"probe": {"zero_offset_pa": 3}}, If_Match='"1"').status_code == 412
    assert kept.client.get(f"{URL}/shared").get_json()["probe"] == {"zero_offset_pa": 2}


def test_a_change_between_reading_and_writing(kept: KeptClient, monkeypatch: pytest.MonkeyPatch) -> None:
    """The condition holds when it is looked at, and no longer when the row is written."""
    put(kept, "raced")
    monkeypatch.setattr("service.http.aircraft._version", lambda *_arguments: 4)
    answer = put(kept, "raced", {}, If_Match='"4"')
    assert (answer.status_code, answer.get_json()["type"]) == (412, "/docs#problem-version-conflict")


@pytest.mark.parametrize("profile", [{"wings": 2}, {"aircraft": {"mass_kg": 0}}, {"loiters": []}, [], "x", 7])
def test_a_wrong_profile(kept: KeptClient, profile: Any) -> None:
    assert put(kept, "wrong", profile).status_code == 422
    assert kept.client.get(f"{URL}/wrong").status_code == 404


@pytest.mark.parametrize("name", ["x" * 101, "%20x", "a%0Ab"])
def test_a_wrong_name(kept: KeptClient, name: str) -> None:
    assert put(kept, name).status_code == 422
    assert kept.client.get(f"{URL}/{name}").status_code == 404


def test_names_of_any_script(kept: KeptClient) -> None:
    answer = kept.client.put(f"{URL}/Möwe 7", json={})
    assert answer.status_code == 201
    assert answer.headers["Location"] == f"{URL}/M%C3%B6we%207"
    assert kept.client.get(answer.headers["Location"]).get_json()["name"] == "Möwe 7"


def test_not_modified(kept: KeptClient) -> None:
    put(kept, "still")
    answer = kept.client.get(f"{URL}/still", headers={"If-None-Match": '"1"'})
    assert (answer.status_code, answer.data) == (304, b"")


def test_lists_by_name(fresh: KeptClient) -> None:
    for name in ("c", "a", "b"):
        put(fresh, name)
    first = fresh.client.get(f"{URL}?limit=2")
    validator("AircraftList").validate(first.get_json())
    assert [item["name"] for item in first.get_json()["items"]] == ["a", "b"]
    assert 'rel="next"' in first.headers["Link"]
    second = fresh.client.get(f"{URL}?limit=2&cursor={first.get_json()['next']}").get_json()
    assert ([item["name"] for item in second["items"]], second["next"]) == (["c"], None)


def test_an_installation(kept: KeptClient) -> None:
    put(kept, "mended")
    url = f"{URL}/mended/installation"
    assert kept.client.put(url, json={"from_utc": "soon"}).status_code == 422
    assert kept.client.put(url, json={}).status_code == 422
    assert (
        kept.client.put(url, json={"from_utc": "2026-05-01T00:00:00Z"}, headers={"If-Match": '"9"'}).status_code == 412
    )
    answer = kept.client.put(url, json={"from_utc": "2026-05-01T02:00:00+02:00"})
    assert (answer.status_code, answer.headers["ETag"]) == (200, '"2"')
    assert answer.get_json()["installation_from_utc"] == "2026-05-01T00:00:00Z"
    nobody = kept.client.put(f"{URL}/nobody/installation", json={"from_utc": "2026-05-01T00:00:00Z"})
    assert nobody.status_code == 404


# --- the pooled factor ------------------------------------------------------------------------------------------------


SURVEY = json.loads((Path(__file__).parents[2] / "samples/survey.json").read_text())


def flown(day: int, factor: float = 1.0) -> dict[str, Any]:
    """The sample flight on another day, its probe reading `factor` times the impact pressure."""
    readings = np.array(SURVEY["probe"]["impact_pressure_pa"], dtype=float) * factor
    probe = SURVEY["probe"] | {"impact_pressure_pa": readings.tolist()}
    return SURVEY | {"probe": probe, "start_utc": f"2026-05-{day + 1:02d}T09:00:00Z"}


@pytest.fixture(scope="module")
def pooled(kept: KeptClient) -> dict[str, str]:
    """Name of the day -> flight, of an aircraft whose fourth flight is a copy of the third, the fifth refused."""
    flights = {str(day): kept.added(flown(day), query="?aircraft=pooled") for day in range(3)}
    flights["copy"] = kept.added(flown(2), query="?aircraft=pooled")
    half_circle = json.loads((Path(__file__).parents[2] / "samples/half_circle.json").read_text())
    flights["refused"] = kept.added(half_circle, query="?aircraft=pooled")
    return flights


def pool_of(kept: KeptClient, name: str = "pooled") -> dict[str, Any]:
    answer = kept.client.get(f"{URL}/{name}/calibration")
    assert answer.status_code == 200, answer.text
    document: dict[str, Any] = answer.get_json()
    validator("PooledCalibration").validate(document)
    return document


def test_the_pool_takes_accepted_flights_once(kept: KeptClient, pooled: dict[str, str]) -> None:
    document = pool_of(kept)
    assert [flight["flight"] for flight in document["flights"]] == [pooled["0"], pooled["1"], pooled["2"]]
    assert sum(flight["weight"] for flight in document["flights"]) == pytest.approx(1.0)
    alone = kept.get(f"{pooled['0']}/calibration")["total_speed_scale"]["value"]
    assert document["speed_scale"]["value"] == pytest.approx(alone, rel=1e-3)
    assert document["pressure_scale"]["value"] == pytest.approx(document["speed_scale"]["value"] ** 2)
    assert document["flights"][0]["speed_scale"]["value"] == pytest.approx(alone, rel=1e-3)
    assert document["advice"]
    assert {caution["code"] for caution in document["cautions"]} == set(CAUTIONS)


def test_exclusion_and_installation_change_the_pool(kept: KeptClient, pooled: dict[str, str]) -> None:
    kept.client.put(f"{FLIGHTS}/{pooled['1']}/exclusion", json={"reason": "tube"})
    assert [flight["flight"] for flight in pool_of(kept)["flights"]] == [pooled["0"], pooled["2"]]
    kept.client.put(f"{URL}/pooled/installation", json={"from_utc": "2026-05-03T00:00:00Z"})
    document = pool_of(kept)
    assert [flight["flight"] for flight in document["flights"]] == [pooled["2"]]
    assert (document["recommendation"], document["between_flights"]) == ("fly_more", None)
    kept.client.put(f"{URL}/pooled/installation", json={"from_utc": "2026-05-01T00:00:00Z"})
    kept.client.delete(f"{FLIGHTS}/{pooled['1']}/exclusion")
    assert len(pool_of(kept)["flights"]) == 3


@pytest.mark.usefixtures("pooled")
def test_a_newest_flight_that_disagrees(kept: KeptClient) -> None:
    """A probe that has come to read 30 % too little pressure."""
    changed = kept.added(flown(9, 0.7), query="?aircraft=pooled")
    document = pool_of(kept)
    assert document["newest"]["flight"] == changed
    assert document["newest"]["disagrees"] is True
    assert (document["recommendation"], document["flights_at_odds"]) == ("check_probe", [changed])
    kept.client.delete(f"{FLIGHTS}/{changed}")


def test_a_pool_of_nothing(kept: KeptClient) -> None:
    put(kept, "unflown")
    document = pool_of(kept, "unflown")
    assert (document["speed_scale"], document["flights"], document["recommendation"]) == (None, [], "fly_more")
    assert kept.client.get(f"{URL}/nobody/calibration").status_code == 404

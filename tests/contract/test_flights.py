"""Kept flights on the wire: add, idempotency, waiting, versions, exclusion, cancel, delete."""

import gzip
import hashlib
import json
import threading
from pathlib import Path
from typing import Any

import pytest
from flask.testing import FlaskClient
from werkzeug.test import TestResponse

from samples.client import multipart
from service.app import create_app
from service.config import Config
from tests import made
from tests.contract.conftest import FLIGHTS, KeptClient, kept_client

ROOT = Path(__file__).parents[2]
BATCH = json.dumps(made.batch()).encode()
WRONG_SCALE = json.dumps(made.batch() | {"settings": {"probe": {"full_scale_pa": -1}}}).encode()
CSV = (ROOT / "samples/survey.csv").read_bytes()
ULOG = (ROOT / "samples/survey.ulg").read_bytes()


def problem(answer: TestResponse, status: int, kind: str) -> Any:
    assert answer.status_code == status, answer.text
    assert answer.mimetype == "application/problem+json"
    document = answer.get_json()
    assert document["status"] == status
    assert document["type"] == f"/docs#problem-{kind}"
    return document


# --- adding -----------------------------------------------------------------------------------------------------------


def test_answered_at_once_and_done_later(kept: KeptClient) -> None:
    answer = kept.add(query="?aircraft=first-kite")
    document = answer.get_json()
    assert answer.status_code == 202
    assert answer.headers["Location"] == f"{FLIGHTS}/{document['flight']}"
    assert answer.headers["Preference-Applied"] == "respond-async"
    assert (document["state"], document["progress"], document["verdict"]) == ("queued", 0.0, None)
    kept.run_jobs()
    shown = kept.get(document["flight"])
    assert (shown["state"], shown["progress"], shown["failure"]) == ("done", 1.0, None)
    assert shown["aircraft"] == "first-kite"
    assert shown["verdict"] == shown["summary"]["calibration"]["verdict"]
    assert shown["provenance"]["log_sha256"] == hashlib.sha256(json.dumps(made.batch()).encode()).hexdigest()
    assert shown["flown_utc"] == shown["summary"]["inputs"]["start_utc"]


def test_the_summary_is_that_of_a_one_shot_request(kept: KeptClient) -> None:
    flight = kept.added()
    once = kept.client.post("/v1/reductions", data=BATCH, content_type="application/json").get_json()
    assert kept.get(flight)["summary"] == once


def test_a_request_waits_for_its_result(kept: KeptClient) -> None:
    with kept.worker():
        answer = kept.client.post(
            f"{FLIGHTS}?include=airspeed,stall_margins", data=BATCH, content_type="application/json"
        )
    document = answer.get_json()
    assert answer.status_code == 201
    assert answer.headers["Location"] == f"{FLIGHTS}/{document['flight']}"
    once = kept.client.post(
        "/v1/reductions?include=stall_margins", data=BATCH, content_type="application/json"
    ).get_json()
    assert set(once) - {"stall_margins"} <= set(document)
    assert document["calibration"] == once["calibration"]
    assert document["state"] == "done"
    assert len(document["airspeed"]["time_s"]) == len(made.batch()["probe"]["time_s"])
    assert document["stall_margins"] is None or document["stall_margins"].keys() == once["stall_margins"].keys()


def test_it_waits_no_longer_than_asked(kept: KeptClient) -> None:
    answer = kept.add(headers={"Prefer": "wait=0"})
    assert (answer.status_code, answer.headers["Preference-Applied"]) == (202, "wait=0")
    kept.run_jobs()


@pytest.mark.parametrize(
    ("data", "media_type", "kept_as"),
    [
        (BATCH, "application/json", "application/json"),
        (BATCH, "application/octet-stream", "application/json"),
        (CSV, "text/csv", "text/csv"),
        (ULOG, "application/octet-stream", "application/octet-stream"),
        (ULOG, "multipart", "application/octet-stream"),
    ],
)
def test_every_form_of_body_and_its_bytes_back(kept: KeptClient, data: bytes, media_type: str, kept_as: str) -> None:
    body = data
    if media_type == "multipart":
        media_type, body = multipart(data, (ROOT / "samples/settings.json").read_bytes())
    headers = {"Prefer": "respond-async", "Content-Encoding": "gzip"}
    answer = kept.client.post(FLIGHTS, data=gzip.compress(body), content_type=media_type, headers=headers)
    assert answer.status_code == 202, answer.text
    log = kept.client.get(f"{FLIGHTS}/{answer.get_json()['flight']}/log")
    assert (log.status_code, log.mimetype) == (200, kept_as)
    assert log.data == data
    assert log.headers["Content-Length"] == str(len(data))
    assert log.headers["Content-Disposition"].startswith("attachment")
    kept.client.post(f"{FLIGHTS}/{answer.get_json()['flight']}/cancel")


def without(name: str) -> bytes:
    batch = made.batch()
    del batch[name]
    return json.dumps(batch).encode()


@pytest.mark.parametrize(
    ("data", "media_type", "query", "status", "kind"),
    [
        (b"", "text/csv", "", 400, "unreadable"),
        (b"\0no log", "application/octet-stream", "", 400, "unreadable"),
        (b'{"probe": NaN}', "application/json", "", 400, "unreadable"),
        (without("gps"), "application/json", "", 422, "wrong-values"),
        (b'{"settings": {"wings": 2}}', "application/json", "", 422, "wrong-values"),
        (WRONG_SCALE, "application/json", "", 422, "wrong-values"),
        (BATCH, "image/png", "", 415, "not-supported"),
        (BATCH, "application/json", "?include=rudder", 422, "wrong-values"),
        (BATCH, "application/json", "?aircraft=", 422, "wrong-values"),
        (BATCH, "application/json", "?aircraft=a%2Fb", 422, "wrong-values"),
        (BATCH, "application/json", "?craft=a", 422, "wrong-values"),
    ],
)
def test_what_is_wrong_is_refused_and_nothing_kept(
    fresh: KeptClient, data: bytes, media_type: str, query: str, status: int, kind: str
) -> None:
    problem(fresh.client.post(FLIGHTS + query, data=data, content_type=media_type), status, kind)
    assert fresh.client.get(FLIGHTS).get_json()["items"] == []
    assert fresh.client.get("/v1/aircraft").get_json()["items"] == []
    assert fresh.logs() == []


def test_a_profile_stands_behind_the_settings(kept: KeptClient) -> None:
    """A configuration that only the profile knows may be named by the flight."""
    profile = {"aircraft": {"reference_mass_kg": 6.0, "configurations": [{"name": "clean", "stall_speed_mps": 11.0}]}}
    kept.client.put("/v1/aircraft/profiled", json=profile)
    batch = made.batch() | {"settings": {"configuration_times": [{"start_s": 0, "name": "clean"}]}}
    assert kept.add(batch).status_code == 422
    flight = kept.added(batch, query="?aircraft=profiled")
    assert kept.get(flight)["summary"]["stall_margins_absent"] is None
    assert kept.get(flight)["provenance"]["profile_version"] == 1


# --- idempotency ------------------------------------------------------------------------------------------------------


def test_the_same_request_again(kept: KeptClient) -> None:
    first = kept.add(key="again")
    queued = kept.add(key="again")
    assert (queued.status_code, queued.headers["Location"]) == (202, first.headers["Location"])
    kept.run_jobs()
    done = kept.add(key="again")
    assert (done.status_code, done.headers["Location"]) == (201, first.headers["Location"])
    assert done.get_json()["calibration"] is not None
    # another app on the same folder: as after a restart
    restarted = kept_client(kept.config)
    assert restarted.add(key="again").get_json() == done.get_json()


def test_it_keeps_its_answer_when_the_flight_is_reduced_again(kept: KeptClient) -> None:
    flight = kept.added(key="versions")
    before = kept.add(key="versions").get_json()
    kept.client.post(
        f"{FLIGHTS}/{flight}/reductions", json={"probe": {"zero_offset_pa": 3}}, headers={"Prefer": "wait=0"}
    )
    kept.run_jobs()
    assert kept.add(key="versions").get_json()["calibration"] == before["calibration"]


def test_another_request_with_the_same_key(kept: KeptClient) -> None:
    kept.added(key="taken")
    problem(kept.add(made.batch(turns=4), key="taken"), 409, "other-request")
    problem(kept.add(key="taken", query="?aircraft=kite"), 409, "other-request")
    media_type, body = multipart(BATCH, b"{}")
    headers = {"Idempotency-Key": "taken"}
    problem(kept.client.post(FLIGHTS, data=body, content_type=media_type, headers=headers), 409, "other-request")
    problem(kept.add(key="x" * 256), 422, "wrong-values")


def test_many_at_once_make_one_flight(kept: KeptClient) -> None:
    answers: list[TestResponse] = []
    start = threading.Barrier(6)

    def send() -> None:
        client = kept.client.application.test_client()
        start.wait()
        headers = {"Prefer": "respond-async", "Idempotency-Key": "race"}
        answers.append(client.post(f"{FLIGHTS}?aircraft=racer", json=made.batch(), headers=headers))

    threads = [threading.Thread(target=send) for _ in range(6)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert {answer.status_code for answer in answers} == {202}
    assert len({answer.headers["Location"] for answer in answers}) == 1
    assert len(kept.client.get(f"{FLIGHTS}?aircraft=racer").get_json()["items"]) == 1
    kept.run_jobs()


# --- duplicates, the queue --------------------------------------------------------------------------------------------


def test_the_same_log_twice(fresh: KeptClient) -> None:
    first = fresh.added(query="?aircraft=kite")
    second = fresh.add(query="?aircraft=kite").get_json()
    assert second["duplicate_of"] == first
    assert fresh.get(first)["duplicate_of"] is None
    assert fresh.add(query="?aircraft=other").get_json()["duplicate_of"] is None
    assert len(fresh.logs()) == 1


def test_a_full_queue(fresh: KeptClient) -> None:
    for turns in (3, 4, 5):
        assert fresh.add(made.batch(turns), key=f"key {turns}").status_code == 202
    full = fresh.add(made.batch(6))
    problem(full, 503, "queue-full")
    assert int(full.headers["Retry-After"]) > 0
    assert len(fresh.logs()) == 3
    # a repeat asks for nothing new
    assert fresh.add(made.batch(3), key="key 3").status_code == 202
    first = fresh.client.get(FLIGHTS).get_json()["items"][0]["flight"]
    problem(fresh.client.post(f"{FLIGHTS}/{first}/reductions", json={}), 503, "queue-full")
    fresh.client.post(f"{FLIGHTS}/{first}/cancel")
    assert fresh.add(made.batch(6)).status_code == 202


# --- versions ---------------------------------------------------------------------------------------------------------


def test_reduced_again_with_other_settings(kept: KeptClient) -> None:
    flight = kept.added()
    before = kept.get(f"{flight}/calibration")
    headers = {"Prefer": "respond-async", "Idempotency-Key": "second"}
    settings = {"probe": {"applied_speed_scale": 2.0}}
    answer = kept.client.post(f"{FLIGHTS}/{flight}/reductions", json=settings, headers=headers)
    assert answer.status_code == 202
    assert answer.headers["Location"] == f"{FLIGHTS}/{flight}/reductions/2"
    assert kept.get(f"{flight}/calibration") == before
    kept.run_jobs()
    after = kept.get(f"{flight}/calibration")
    assert (before["reduction"], after["reduction"]) == (1, 2)
    assert after["total_speed_scale"]["value"] == pytest.approx(2 * after["speed_scale"]["value"])
    assert kept.get(f"{flight}/calibration?reduction=1") == before
    again = kept.client.post(f"{FLIGHTS}/{flight}/reductions", json=settings, headers=headers)
    assert (again.status_code, again.headers["Location"]) == (201, answer.headers["Location"])
    versions = kept.get(f"{flight}/reductions")["items"]
    assert [version["number"] for version in versions] == [1, 2]
    assert versions[1]["settings"] == settings
    assert kept.get(f"{flight}/reductions/2") == versions[1]
    assert kept.client.get(f"{FLIGHTS}/{flight}/reductions/3").status_code == 404
    other = kept.client.post(f"{FLIGHTS}/{flight}/reductions", json={}, headers=headers)
    problem(other, 409, "other-request")


@pytest.mark.parametrize(
    ("body", "media_type", "status"),
    [
        (b"{", "application/json", 400),
        (b"", "application/json", 400),
        (b"[]", "application/json", 422),
        (b"null", "application/json", 422),
        (b'{"wings": 2}', "application/json", 422),
        (b"{}", "text/csv", 415),
        (b"{}", "", 415),
        (b" " * 1_048_577 + b"{}", "application/json", 413),
    ],
)
def test_wrong_settings_for_a_new_reduction(kept: KeptClient, body: bytes, media_type: str, status: int) -> None:
    flight = kept.client.get(FLIGHTS).get_json()["items"][0]["flight"]
    count = len(kept.get(f"{flight}/reductions")["items"])
    answer = kept.client.post(f"{FLIGHTS}/{flight}/reductions", data=body, content_type=media_type)
    assert answer.status_code == status, answer.text
    assert len(kept.get(f"{flight}/reductions")["items"]) == count


def test_a_changed_profile_makes_results_stale(kept: KeptClient) -> None:
    flight = kept.added(query="?aircraft=changing")
    assert kept.get(flight)["stale"] is False
    kept.client.put("/v1/aircraft/changing", json={"probe": {"zero_offset_pa": 1}}, headers={"If-Match": '"1"'})
    assert kept.get(flight)["stale"] is True
    assert kept.get(f"{flight}/wind")["stale"] is True
    kept.client.post(f"{FLIGHTS}/{flight}/reductions", json={}, headers={"Prefer": "wait=0"})
    kept.run_jobs()
    assert kept.get(flight)["stale"] is False
    assert kept.get(f"{flight}/calibration")["zero_offset_source"] == "given"
    assert [version["stale"] for version in kept.get(f"{flight}/reductions")["items"]] == [True, False]


# --- cancel, exclusion, deletion --------------------------------------------------------------------------------------


def test_a_cancelled_reduction_has_failed(kept: KeptClient) -> None:
    answer = kept.add(key="cancelled")
    flight = answer.get_json()["flight"]
    cancelled = kept.client.post(f"{FLIGHTS}/{flight}/cancel")
    assert cancelled.status_code == 200
    assert (cancelled.get_json()["state"], cancelled.get_json()["failure"]) == ("failed", "cancelled")
    assert kept.run_jobs() == 0
    problem(kept.client.get(f"{FLIGHTS}/{flight}/wind"), 404, "no-result")
    again = kept.add(key="cancelled")
    assert (again.status_code, again.get_json()["state"]) == (201, "failed")
    assert "calibration" not in again.get_json()
    done = kept.added()
    assert kept.client.post(f"{FLIGHTS}/{done}/cancel").get_json()["state"] == "done"


def test_exclusion(kept: KeptClient) -> None:
    flight = kept.added()
    excluded = kept.client.put(f"{FLIGHTS}/{flight}/exclusion", json={"reason": "kinked tube"})
    assert excluded.status_code == 200
    assert excluded.get_json()["exclusion"]["reason"] == "kinked tube"
    assert kept.get(flight)["exclusion"]["since_utc"].endswith("Z")
    assert kept.client.delete(f"{FLIGHTS}/{flight}/exclusion").status_code == 204
    assert kept.get(flight)["exclusion"] is None
    assert kept.client.delete(f"{FLIGHTS}/{flight}/exclusion").status_code == 204


@pytest.mark.parametrize(
    "body",
    [
        {},
        {"reason": ""},
        {"reason": "  "},
        {"reason": 7},
        {"reason": "x" * 1001},
        {"reason": "a\0"},
        [],
        {"reason": "x", "by": "me"},
    ],
)
def test_no_reason(kept: KeptClient, body: Any) -> None:
    flight = kept.client.get(FLIGHTS).get_json()["items"][0]["flight"]
    answer = kept.client.put(f"{FLIGHTS}/{flight}/exclusion", json=body)
    assert problem(answer, 422, "wrong-values")["errors"]
    assert kept.get(flight)["exclusion"] is None


def test_a_deleted_flight_is_gone_with_its_log(fresh: KeptClient) -> None:
    first, second = fresh.added(), fresh.added()
    assert fresh.client.delete(f"{FLIGHTS}/{first}").status_code == 204
    for path in ("", "/log", "/calibration", "/airspeed", "/reductions"):
        assert fresh.client.get(f"{FLIGHTS}/{first}{path}").status_code == 404
    assert fresh.client.delete(f"{FLIGHTS}/{first}").status_code == 404
    # the other flight holds the same log
    assert fresh.client.get(f"{FLIGHTS}/{second}/log").status_code == 200
    assert fresh.client.delete(f"{FLIGHTS}/{second}").status_code == 204
    assert fresh.logs() == []


@pytest.mark.parametrize("flight", ["0" * 26, "nothing", "..", "%00", "Z" * 26])
@pytest.mark.parametrize(
    ("method", "path"),
    [
        ("GET", ""),
        ("DELETE", ""),
        ("GET", "/log"),
        ("GET", "/faults"),
        ("GET", "/airspeed"),
        ("GET", "/reductions"),
        ("GET", "/reductions/1"),
        ("POST", "/cancel"),
        ("POST", "/reductions"),
        ("PUT", "/exclusion"),
        ("DELETE", "/exclusion"),
    ],
)
def test_no_such_flight(kept: KeptClient, flight: str, method: str, path: str) -> None:
    body = {"reason": "x"} if path == "/exclusion" else {}
    answer = kept.client.open(f"{FLIGHTS}/{flight}{path}", method=method, json=body if method != "GET" else None)
    assert answer.status_code == 404, answer.text


def test_an_answer_that_the_client_has(kept: KeptClient) -> None:
    flight = kept.added()
    for path in (flight, f"{flight}/calibration", f"{flight}/reductions/1"):
        tag = kept.client.get(f"{FLIGHTS}/{path}").headers["ETag"]
        again = kept.client.get(f"{FLIGHTS}/{path}", headers={"If-None-Match": tag})
        assert (again.status_code, again.data) == (304, b"")


# --- without a place, out of reach ------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def keeps_nothing() -> FlaskClient:
    return create_app(Config(log_level="ERROR")).test_client()


@pytest.mark.parametrize("path", [FLIGHTS, f"{FLIGHTS}/{'0' * 26}", "/v1/aircraft", "/v1/aircraft/kite/calibration"])
def test_a_server_that_keeps_nothing_says_how_it_would(keeps_nothing: FlaskClient, path: str) -> None:
    document = problem(keeps_nothing.get(path), 503, "nothing-kept")
    assert "LOITERWISE_DATA" in document["detail"]
    assert keeps_nothing.get("/v1/health/ready").status_code == 200


def test_a_place_that_cannot_be_used_and_then_can(tmp_path: Path) -> None:
    folder = tmp_path / "data"
    folder.write_text("a file is in the way")
    config = Config(data=tmp_path / "files", database_url=f"sqlite:///{folder}/x.sqlite", log_level="ERROR")
    client = create_app(config).test_client()
    answer = client.get(FLIGHTS)
    document = problem(answer, 503, "storage-unavailable")
    assert str(folder) not in document["detail"]
    assert int(answer.headers["Retry-After"]) > 0
    assert client.get("/v1/health/ready").status_code == 503
    folder.unlink()
    assert client.get(FLIGHTS).status_code == 200
    assert client.get("/v1/health/ready").status_code == 200

"""What the service promises on the wire."""

import gzip
import hashlib
import io
import json
import logging
import os
import re
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, NamedTuple

import pytest
from flask.testing import FlaskClient
from werkzeug.datastructures import FileStorage
from werkzeug.test import TestResponse, encode_multipart

from service.app import create_app
from service.config import Access, Config
from service.domain.errors import InputTooLarge, UnreadableInput, WrongValues
from service.domain.results import Reduction
from service.intake import reduce_file
from tests import made

URL = "/v1/reductions"
BATCH = json.dumps(made.batch()).encode()
KEY = "a-key-for-the-tests"


def refuse(token: str) -> None:
    raise AssertionError(f"{token} is not JSON")


def read(answer: TestResponse) -> Any:
    return json.loads(answer.data, parse_constant=refuse)


def post(client: FlaskClient, data: bytes, media_type: str = "application/octet-stream", **more: Any) -> TestResponse:
    return client.post(more.pop("url", URL), data=data, content_type=media_type, **more)


def post_form(client: FlaskClient, **parts: Any) -> TestResponse:
    boundary, body = encode_multipart(form(**parts))
    return post(client, body, f"multipart/form-data; boundary={boundary}")


def form(log: bytes | None = BATCH, settings: str | None = None, **parts: str) -> dict[str, Any]:
    fields: dict[str, Any] = dict(parts)
    if log is not None:
        fields["log"] = FileStorage(io.BytesIO(log), "flight.bin")
    if settings is not None:
        fields["settings"] = settings
    return fields


# --- bodies -----------------------------------------------------------------------------------------------------------


@pytest.fixture
def seen(monkeypatch: pytest.MonkeyPatch) -> list[dict[str, Any]]:
    """What each accepted request handed on: bytes, hash, settings."""
    calls: list[dict[str, Any]] = []

    def keep(path: Path, **named: Any) -> Reduction:
        calls.append({"path": path, "data": path.read_bytes(), **named})
        return made.reduction()

    monkeypatch.setattr("service.http.reductions.reduce_file", keep)
    return calls


@pytest.mark.parametrize(
    "media_type", ["application/octet-stream", "text/csv", "text/csv; charset=utf-8; header=present", ""]
)
def test_raw_bodies(client: FlaskClient, seen: list[dict[str, Any]], media_type: str) -> None:
    assert post(client, b"\0some bytes", media_type).status_code == 200
    assert seen[0]["data"] == b"\0some bytes"
    assert seen[0]["sha256"] == hashlib.sha256(b"\0some bytes").hexdigest()
    assert seen[0]["settings"] is None


def test_a_json_body(client: FlaskClient, seen: list[dict[str, Any]]) -> None:
    assert post(client, BATCH, "application/json; charset=utf-8").status_code == 200
    assert seen[0]["data"] == BATCH


def test_a_multipart_body(client: FlaskClient, seen: list[dict[str, Any]]) -> None:
    answer = post_form(client, settings='{"probe": {"zero_offset_pa": 1}}')
    assert answer.status_code == 200
    assert seen[0]["data"] == BATCH
    assert seen[0]["settings"] == {"probe": {"zero_offset_pa": 1}}


@pytest.mark.parametrize("coding", ["gzip", "GZIP", "x-gzip"])
def test_gzip_bodies_of_every_form(client: FlaskClient, seen: list[dict[str, Any]], coding: str) -> None:
    zipped = gzip.compress(b"\0some bytes")
    assert post(client, zipped, headers={"Content-Encoding": coding}).status_code == 200
    assert seen[0]["data"] == b"\0some bytes"


def test_the_file_is_gone_after_an_answer(client: FlaskClient, seen: list[dict[str, Any]], config: Config) -> None:
    post(client, b"bytes")
    assert seen[0]["path"].parent == config.spool
    assert list(config.spool.iterdir()) == []


def test_the_file_is_gone_after_a_failure(client: FlaskClient, config: Config) -> None:
    assert post(client, b"\0no log").status_code == 400
    assert list(config.spool.iterdir()) == []


# --- the answer -------------------------------------------------------------------------------------------------------

SUMMARY = {
    "calibration",
    "wind",
    "loiters",
    "stall_margins_absent",
    "stall_warnings",
    "faults",
    "inputs",
    "cautions",
    "version",
}


@pytest.mark.usefixtures("reduced")
@pytest.mark.parametrize(
    ("query", "parts"),
    [
        ("", set()),
        ("?include=", set()),
        ("?include=airspeed", {"airspeed"}),
        ("?include=airspeed,stall_margins", {"airspeed", "stall_margins"}),
        ("?include=faults,%20stall_margins,", {"stall_margins"}),
    ],
)
def test_include(client: FlaskClient, query: str, parts: set[str]) -> None:
    answer = post(client, b"bytes", url=URL + query)
    assert answer.status_code == 200
    assert answer.mimetype == "application/json"
    document = read(answer)
    assert set(document) == SUMMARY | parts
    assert ("message" in document["faults"][0]) == ("faults" in query)


@pytest.mark.usefixtures("reduced")
@pytest.mark.parametrize("accept", ["application/json", "*/*", "application/*", "text/html, application/json;q=0.1"])
def test_accepted_forms(client: FlaskClient, accept: str) -> None:
    assert post(client, b"bytes", headers={"Accept": accept}).status_code == 200


@pytest.mark.parametrize("media_type", ["application/json", "application/octet-stream"])
def test_a_real_flight(client: FlaskClient, media_type: str) -> None:
    """End to end: circles in still air with a wind towards north."""
    answer = post(client, BATCH, media_type, url=URL + "?include=airspeed,stall_margins,faults")
    assert answer.status_code == 200
    document = read(answer)
    assert document["inputs"]["format"] == "batch"
    assert document["inputs"]["start_utc"] == "2026-05-04T09:12:00Z"
    assert document["airspeed"]["time_s"] == made.batch()["probe"]["time_s"]
    assert document["calibration"]["speed_scale"]["value"] == pytest.approx(1.0, abs=0.03)
    assert document["wind"]["north_mps"]["value"] == pytest.approx(3.0, abs=0.5)
    assert document["stall_margins"] is None
    assert document["stall_margins_absent"]


def test_a_flight_without_an_answer_is_refused_with_200(client: FlaskClient) -> None:
    document = made.batch(turns=1)
    document["gps"]["velocity_north_mps"] = [17.0] * len(document["gps"]["time_s"])
    document["gps"]["velocity_east_mps"] = [0.0] * len(document["gps"]["time_s"])
    answer = post(client, json.dumps(document).encode(), "application/json", url=URL + "?include=airspeed")
    assert answer.status_code == 200
    body = read(answer)
    assert body["calibration"]["verdict"] == "refused"
    assert body["calibration"]["reasons"]
    assert body["calibration"]["speed_scale"] is None
    assert all("uncalibrated" in flags for flags in body["airspeed"]["flags"])


def test_settings_beside_the_log_replace_those_inside(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    used: list[Any] = []
    monkeypatch.setattr("service.intake.reduce_flight", lambda _log, settings, **_named: used.append(settings))
    path = tmp_path / "batch"
    path.write_text(json.dumps(made.batch() | {"settings": {"probe": {"zero_offset_pa": 1}}}))
    reduce_file(path, sha256="")
    reduce_file(path, sha256="", settings={})
    reduce_file(path, sha256="", settings={"probe": {"zero_offset_pa": 2}})
    assert [settings.probe.zero_offset_pa for settings in used] == [1.0, None, 2.0]


# --- problems ---------------------------------------------------------------------------------------------------------


class Case(NamedTuple):
    """A request that fails, its status, and where its `errors` point."""

    status: int
    send: Callable[[FlaskClient], TestResponse]
    pointers: tuple[str, ...] = ()
    headers: Mapping[str, str] = {}


Send = Callable[[FlaskClient], TestResponse]


def failing(data: bytes, media_type: str = "application/octet-stream", **more: Any) -> Send:
    return lambda client: post(client, data, media_type, **more)


def failing_form(**parts: Any) -> Send:
    return lambda client: post_form(client, **parts)


def zipped(data: bytes, coding: str = "gzip") -> Send:
    return failing(data, headers={"Content-Encoding": coding})


def changed(**parts: Any) -> bytes:
    return json.dumps(made.batch() | parts).encode()


CASES = {
    "no such path": Case(404, lambda client: client.get("/v1/nothing")),
    "path with odd characters": Case(404, lambda client: client.get("/v1/%00%ff/../<script>")),
    "wrong method": Case(405, lambda client: client.get(URL), headers={"Allow": "POST, OPTIONS|OPTIONS, POST"}),
    "no method at all": Case(405, lambda client: client.open("/docs", method="BREW")),
    "empty": Case(400, failing(b"")),
    "empty JSON": Case(400, failing(b"", "application/json")),
    "no log": Case(400, failing(b"\0\1\2\3")),
    "JSON that is none": Case(400, failing(b"time_s,impact_pressure_pa", "application/json")),
    "JSON number": Case(400, failing(b"5", "application/json")),
    "JSON list": Case(422, failing(b"[1]", "application/json")),
    "cut JSON": Case(400, failing(BATCH[:-1], "application/json")),
    "NaN token": Case(400, failing(BATCH.replace(b"0.0", b"NaN", 1), "application/json")),
    "UTF-16 JSON": Case(400, failing(BATCH.decode().encode("utf-16"), "application/json")),
    "deep nesting": Case(400, failing(b'{"settings":' + b"[" * 100_000, "application/json")),
    "huge integer": Case(422, failing(b'{"probe":{"time_s":[' + b"9" * 5000 + b"]}}", "application/json")),
    "unknown stream": Case(422, failing(changed(rudder={}), "application/json"), ("/rudder",)),
    "no GPS": Case(422, failing(changed(gps=None), "application/json"), ("/gps",)),
    "text for a number": Case(
        422,
        failing(changed(probe={"time_s": [0, "1"], "impact_pressure_pa": [1, 2]}), "application/json"),
        ("/probe/time_s/...",),
    ),
    "unequal columns": Case(
        422,
        failing(changed(probe={"time_s": [0, 1], "impact_pressure_pa": [1]}), "application/json"),
        ("/probe/impact_pressure_pa",),
    ),
    "unsorted times": Case(
        422,
        failing(changed(probe={"time_s": [1, 0], "impact_pressure_pa": [1, 2]}), "application/json"),
        ("/probe/time_s",),
    ),
    "wrong settings inside": Case(
        422,
        failing(changed(settings={"aircraft": {"mass_kg": -1}}), "application/json"),
        ("/settings/aircraft/mass_kg",),
    ),
    "wrong settings beside": Case(
        422, failing_form(settings='{"aircraft": {"mass_kg": -1}}'), ("/settings/aircraft/mass_kg",)
    ),
    "settings that are no JSON": Case(400, failing_form(settings="{")),
    "settings with NaN": Case(400, failing_form(settings='{"probe": {"zero_offset_pa": NaN}}')),
    "settings in deep nesting": Case(400, failing_form(settings="[" * 100_000)),
    "settings that are null or a list": Case(422, failing_form(settings="[]"), ("/settings",)),
    "endless settings": Case(413, failing_form(settings=" " * 1_100_000)),
    "form without a log": Case(422, failing_form(log=None, settings="{}"), ("/log",)),
    "form with another part": Case(422, failing_form(photo="x"), ("/photo",)),
    "form without a boundary": Case(400, failing(b"--x\r\n", "multipart/form-data")),
    "form cut short": Case(400, failing(b"--x\r\nContent", "multipart/form-data; boundary=x")),
    "wrong media type": Case(415, failing(b"{}", "application/x-www-form-urlencoded"), headers={"Accept-Post": ".*"}),
    "odd media type": Case(415, failing(b"{}", "text/<script>")),
    "wrong coding": Case(415, zipped(b"x", "br"), headers={"Accept-Encoding": "gzip, identity"}),
    "two codings": Case(415, zipped(b"x", "gzip, gzip"), headers={"Accept-Encoding": "gzip, identity"}),
    "no gzip": Case(400, zipped(b"x" * 100)),
    "cut gzip": Case(400, zipped(gzip.compress(BATCH)[:-5])),
    "junk behind gzip": Case(400, zipped(gzip.compress(BATCH) + b"junk")),
    "unacceptable": Case(406, failing(BATCH, headers={"Accept": "text/html"})),
    "unacceptable by weight": Case(406, failing(BATCH, headers={"Accept": "application/json;q=0, text/html"})),
    "nonsense in Accept": Case(406, failing(BATCH, headers={"Accept": "nonsense"})),
    "unknown part": Case(422, failing(BATCH, url=URL + "?include=airspeed,wind"), ("/include",)),
    "unknown parameter": Case(422, failing(BATCH, url=URL + "?includes=airspeed"), ("/includes",)),
    "repeated parameter": Case(422, failing(BATCH, url=URL + "?include=faults&include=faults"), ("/include",)),
}


def check_problem(answer: TestResponse, status: int) -> dict[str, Any]:
    """The one shape of every error."""
    assert answer.status_code == status
    assert answer.mimetype == "application/problem+json"
    problem: dict[str, Any] = read(answer)
    assert set(problem) - {"errors"} == {"type", "title", "status", "detail", "request_id"}
    assert problem["status"] == status
    assert all(isinstance(problem[name], str) and problem[name] for name in ("type", "title", "detail"))
    assert problem["request_id"] == answer.headers["X-Request-Id"]
    assert problem["type"] == "about:blank" or re.fullmatch(r"/docs#problem-[a-z-]+", problem["type"])
    for pointer, message in problem.get("errors", {}).items():
        assert pointer == "" or pointer.startswith("/")
        assert message
    assert answer.headers["Cache-Control"] == "no-store"
    assert "Traceback" not in answer.text
    return problem


@pytest.mark.parametrize("name", CASES)
def test_every_failure_is_a_problem_of_one_shape(client: FlaskClient, name: str, config: Config) -> None:
    case = CASES[name]
    answer = case.send(client)
    problem = check_problem(answer, case.status)
    pointers = tuple(re.sub(r"/\d+$", "/...", pointer) for pointer in problem.get("errors", {}))
    if case.pointers:
        assert pointers == case.pointers
    for header, pattern in case.headers.items():
        assert re.fullmatch(pattern, answer.headers[header])
    assert not config.spool.exists() or list(config.spool.iterdir()) == []


def test_a_body_over_the_limit_by_its_length(config: Config) -> None:
    client = create_app(Config(data=config.data, max_upload_bytes=10)).test_client()
    check_problem(post(client, b"x" * 11), 413)


def test_a_body_over_the_limit_without_a_length(config: Config) -> None:
    client = create_app(Config(data=config.data, max_upload_bytes=10)).test_client()
    answer = client.post(
        URL,
        input_stream=io.BytesIO(b"x" * 11),
        content_type="application/octet-stream",
        environ_overrides={"wsgi.input_terminated": True},
    )
    check_problem(answer, 413)


def test_a_bomb(config: Config) -> None:
    client = create_app(Config(data=config.data, max_decoded_bytes=1_000_000)).test_client()
    bomb = gzip.compress(bytes(50_000_000))
    check_problem(post(client, bomb, headers={"Content-Encoding": "gzip"}), 413)


def test_a_batch_over_its_own_limit_is_not_even_taken_in(client: FlaskClient, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("service.http.submission.MOST_BATCH_BYTES", 10)
    check_problem(post(client, BATCH, "application/json"), 413)


def test_a_client_that_leaves(client: FlaskClient) -> None:
    answer = client.post(
        URL,
        input_stream=io.BytesIO(b"half"),
        content_type="application/octet-stream",
        environ_overrides={"CONTENT_LENGTH": "8"},
    )
    assert check_problem(answer, 400)["type"] == "/docs#problem-cut-short"


def test_a_client_that_leaves_a_server_that_ends_streams_itself(client: FlaskClient) -> None:
    answer = client.post(
        URL,
        input_stream=io.BytesIO(b"half"),
        content_type="application/octet-stream",
        environ_overrides={"CONTENT_LENGTH": "8", "wsgi.input_terminated": True},
    )
    assert check_problem(answer, 400)["type"] == "/docs#problem-cut-short"


@pytest.mark.parametrize(
    ("error", "status"),
    [(UnreadableInput("So."), 400), (WrongValues("So.", {"/a": "b"}), 422), (InputTooLarge("So."), 413)],
)
def test_errors_from_below(client: FlaskClient, monkeypatch: pytest.MonkeyPatch, error: Exception, status: int) -> None:
    def fail(*_arguments: object, **_named: object) -> None:
        raise error

    monkeypatch.setattr("service.http.reductions.reduce_file", fail)
    problem = check_problem(post(client, b"bytes"), status)
    assert problem["detail"] == "So."
    assert problem.get("errors", {}) == getattr(error, "errors", {})


def test_our_own_failure_says_nothing_but_its_id(
    client: FlaskClient, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture, config: Config
) -> None:
    monkeypatch.setattr("service.http.reductions.reduce_file", lambda *_arguments, **_named: 1 / 0)
    answer = post(client, b"bytes")
    check_problem(answer, 500)
    assert "division" not in answer.text
    assert "ZeroDivisionError" in caplog.text
    assert list(config.spool.iterdir()) == []


def test_no_turn(config: Config, monkeypatch: pytest.MonkeyPatch) -> None:
    client = create_app(Config(data=config.data, reductions_at_once=1, wait_s=0.0)).test_client()
    answers: list[TestResponse] = []

    def reduce_within(*_arguments: object, **_named: object) -> Reduction:
        answers.append(post(client.application.test_client(), b"bytes"))
        return made.reduction()

    monkeypatch.setattr("service.http.reductions.reduce_file", reduce_within)
    assert post(client, b"bytes").status_code == 200
    check_problem(answers[0], 503)
    assert int(answers[0].headers["Retry-After"]) >= 1


def test_no_room(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    client = create_app(Config(data=tmp_path / "file")).test_client()
    for answer in (post(client, b"bytes"), client.get("/v1/health/ready")):
        check_problem(answer, 503)
        assert answer.headers["Retry-After"]
    assert client.get("/v1/health/live").status_code == 200


# --- access -----------------------------------------------------------------------------------------------------------


@pytest.fixture
def locked(config: Config) -> FlaskClient:
    return create_app(Config(access=Access.KEYS, key=KEY, data=config.data)).test_client()


@pytest.mark.parametrize(
    "given", [None, "", "Bearer", "Bearer wrong", f"Basic {KEY}", KEY, f"Bearer {KEY}x", "Bearer \xff\xfe"]
)
def test_without_the_key(locked: FlaskClient, given: str | None) -> None:
    answer = post(locked, BATCH, headers={} if given is None else {"Authorization": given})
    check_problem(answer, 401)
    assert answer.headers["WWW-Authenticate"].startswith("Bearer")
    assert KEY not in answer.text


@pytest.mark.usefixtures("reduced")
@pytest.mark.parametrize("scheme", ["Bearer", "bearer"])
def test_with_the_key(locked: FlaskClient, scheme: str) -> None:
    assert post(locked, BATCH, headers={"Authorization": f"{scheme} {KEY}"}).status_code == 200


@pytest.mark.parametrize("path", ["/", "/docs", "/v1/openapi.json", "/v1/health/live", "/v1/health/ready"])
def test_what_holds_nothing_of_anyone_needs_no_key(locked: FlaskClient, path: str) -> None:
    assert locked.get(path).status_code == 200


# --- health, pages, headers, log --------------------------------------------------------------------------------------


def test_health(client: FlaskClient) -> None:
    assert read(client.get("/v1/health/live")) == {"status": "live"}
    assert read(client.get("/v1/health/ready"))["status"] == "ready"


@pytest.mark.parametrize("path", ["/", "/docs"])
def test_pages_stand_alone(client: FlaskClient, path: str) -> None:
    answer = client.get(path)
    assert answer.mimetype == "text/html"
    assert "<script" not in answer.text
    assert "style=" not in answer.text
    for address in re.findall(r'(?:href|src)="([^"]*)"', answer.text):
        assert address.startswith(("/", "#")), address
        if address.startswith("/"):
            assert client.get(address, buffered=True).status_code == 200
    policy = answer.headers["Content-Security-Policy"]
    assert policy.startswith("default-src 'none'")
    assert "unsafe" not in policy


def test_every_link_within_the_documentation_arrives(client: FlaskClient) -> None:
    page = client.get("/docs").text
    anchors = set(re.findall(r'id="([^"]+)"', page))
    assert set(re.findall(r'href="#([^"]+)"', page)) <= anchors
    for case in CASES.values():
        kind = read(case.send(client))["type"]
        assert kind == "about:blank" or kind.removeprefix("/docs#") in anchors


@pytest.mark.parametrize("path", ["/", "/docs", "/v1/openapi.json", "/v1/health/live", "/v1/health/ready"])
def test_head_and_options(client: FlaskClient, path: str) -> None:
    head = client.head(path)
    assert (head.status_code, head.data) == (200, b"")
    assert head.headers["Content-Type"] == client.get(path).headers["Content-Type"]
    options = client.options(path)
    assert options.status_code == 200
    assert set(options.headers["Allow"].split(", ")) == {"GET", "HEAD", "OPTIONS"}


@pytest.mark.parametrize("path", ["/", "/docs", "/v1/health/live", "/v1/nothing", "/static/page.css"])
def test_careful_headers_everywhere(client: FlaskClient, path: str) -> None:
    headers = client.get(path, buffered=True).headers
    assert headers["X-Content-Type-Options"] == "nosniff"
    assert "frame-ancestors 'none'" in headers["Content-Security-Policy"]
    assert headers["Referrer-Policy"] == "no-referrer"


def test_a_sane_request_id_is_echoed(client: FlaskClient) -> None:
    assert client.get("/", headers={"X-Request-Id": "ours-1.2_3"}).headers["X-Request-Id"] == "ours-1.2_3"


@pytest.mark.parametrize("given", ["", "with space", "x" * 65, 'quo"te', "\xff"])
def test_another_is_replaced(client: FlaskClient, given: str) -> None:
    made_id = client.get("/", headers={"X-Request-Id": given}).headers["X-Request-Id"]
    assert re.fullmatch(r"[0-9a-f]{32}", made_id)


@pytest.mark.usefixtures("reduced")
def test_one_line_per_request_without_secrets(locked: FlaskClient, caplog: pytest.LogCaptureFixture) -> None:
    caplog.set_level(logging.INFO, logger="loiterwise")
    post(locked, b"body content", headers={"Authorization": f"Bearer {KEY}", "X-Request-Id": "ours"})
    (record,) = caplog.records
    fields: dict[str, Any] = record.__dict__["fields"]
    assert set(fields) == {"method", "path", "status", "duration_s", "bytes_in", "bytes_out"}
    assert (fields["method"], fields["path"], fields["status"], fields["bytes_in"]) == ("POST", URL, 200, 12)
    assert fields["bytes_out"] > 100
    assert KEY not in str(fields)
    assert "body content" not in str(fields)


def test_the_process_keeps_no_file_open(client: FlaskClient) -> None:
    before = len(os.listdir("/proc/self/fd"))
    for _ in range(5):
        post(client, b"\0bytes")
    assert len(os.listdir("/proc/self/fd")) == before

"""The samples: what they should give, whether the truth is in it, and whether the generator still makes them."""

import gzip
import json
import math
import subprocess
import sys
import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from flask.testing import FlaskClient
from werkzeug.serving import make_server

from samples.client import multipart
from schemas.settings import load_settings
from service.app import create_app
from service.config import Config
from service.domain.glossary import STREAMS
from service.domain.log import DecodedLog
from service.readers.registry import read_log
from tests.synthetic.make_samples import CASES, FOLDER, answer_name, write_flights

MOST_BYTES = 3_000_000
SURVEYS = [name for name in CASES if name.startswith("survey")]
TRUTH = json.loads((FOLDER / "truth.json").read_text())["survey"]
SHARE_OF_UNCERTAINTY = 0.2
"""By how much of its standard uncertainty an estimate may differ on another machine."""


def answer(client: FlaskClient, name: str) -> Any:
    """What the service says to a sample, sent as its README says."""
    settings = CASES[name]
    content = (FOLDER / name).read_bytes()
    if settings is None:
        response = client.post("/v1/reductions", data=content, content_type="application/json")
    else:
        content_type, body = multipart(content, (FOLDER / settings).read_bytes())
        response = client.post("/v1/reductions", data=body, content_type=content_type)
    assert response.status_code == 200, response.text
    return response.get_json()


def differences(got: Any, expected: Any, at: str = "") -> Iterator[str]:
    """Where two answers differ by more than rounding; messages, which repeat the numbers, are left aside."""
    if isinstance(expected, dict) and isinstance(got, dict):
        if set(got) != set(expected):
            yield f"{at}: {sorted(set(got) ^ set(expected))}"
        elif "standard_uncertainty" in expected:
            yield from _estimate_differences(got, expected, at)
        else:
            for name in set(expected) - {"message", "version"}:
                yield from differences(got[name], expected[name], f"{at}/{name}")
    elif isinstance(expected, list) and isinstance(got, list) and len(got) == len(expected):
        for index, pair in enumerate(zip(got, expected, strict=True)):
            yield from differences(*pair, f"{at}/{index}")
    elif not _alike(got, expected):
        yield f"{at}: {got} instead of {expected}"


def _estimate_differences(got: dict[str, Any], expected: dict[str, Any], at: str) -> Iterator[str]:
    room = SHARE_OF_UNCERTAINTY * expected["standard_uncertainty"]
    values = zip([got["value"], *got["interval_95"]], [expected["value"], *expected["interval_95"]], strict=True)
    if any(abs(a - b) > room for a, b in values):
        yield f"{at}: {got} instead of {expected}"


def _alike(got: Any, expected: Any) -> bool:
    if isinstance(expected, float) and isinstance(got, int | float):
        return math.isclose(got, expected, rel_tol=0.02, abs_tol=0.02)
    return bool(got == expected)


@pytest.mark.parametrize("name", CASES)
def test_the_expected_answer(client: FlaskClient, name: str) -> None:
    expected = json.loads((FOLDER / "expected" / answer_name(name)).read_text())
    assert list(differences(answer(client, name), expected)) == []


def test_the_comparison_would_notice() -> None:
    estimate = {"value": 1.0, "standard_uncertainty": 0.01, "interval_95": [0.98, 1.02]}
    assert list(differences({"a": estimate | {"value": 1.003}}, {"a": estimate}))
    assert list(differences({"a": [1]}, {"a": [1, 2]}))
    assert list(differences({"a": "accepted"}, {"a": "doubtful"}))
    assert list(differences({"a": 1.0}, {"a": 1.1}))
    assert not list(differences({"a": estimate | {"value": 1.001}}, {"a": estimate}))


@pytest.mark.parametrize("name", SURVEYS)
def test_the_truth_is_in_the_answer(client: FlaskClient, name: str) -> None:
    document = answer(client, name)
    calibration, wind = document["calibration"], document["wind"]
    pairs = {
        "speed_scale": (calibration["speed_scale"], TRUTH["speed_scale"]),
        "pressure_scale": (calibration["pressure_scale"], TRUTH["pressure_scale"]),
        "zero_offset": (calibration["zero_offset_pa"], TRUTH["zero_offset_pa"]),
        "gps_delay": (calibration["gps_delay_s"], TRUTH["gps_delay_s"]),
        "north": (wind["north_mps"], TRUTH["wind_north_mps"]),
        "east": (wind["east_mps"], TRUTH["wind_east_mps"]),
    }
    outside = {n: (e, truth) for n, (e, truth) in pairs.items() if not _holds(e["interval_95"], truth)}
    assert outside == {}


def _holds(interval: list[float], truth: float) -> bool:
    return interval[0] <= truth <= interval[1]


@pytest.mark.parametrize("name", SURVEYS)
def test_what_the_uncorrected_reading_hid(client: FlaskClient, name: str) -> None:
    """The demo's point: the flight came nearer to the stall than its own instrument said."""
    warnings = answer(client, name)["stall_warnings"]
    assert {warning["level"] for warning in warnings} == {"caution", "warning"}
    assert all(warning["indicated_margin"] > warning["minimum_margin"] + 0.05 for warning in warnings)
    assert all(273.0 < warning["start_s"] < warning["end_s"] < 345.0 for warning in warnings)


def test_the_half_circle_is_refused(client: FlaskClient) -> None:
    calibration = answer(client, "half_circle.json")["calibration"]
    assert calibration["verdict"] == "refused"
    assert [reason["code"] for reason in calibration["reasons"]] == ["heading_coverage"]
    assert calibration["speed_scale"] is None


def decoded(folder: Path, name: str) -> DecodedLog:
    settings = json.loads((FOLDER / "settings_foreign.json").read_text())
    columns = load_settings(settings).columns if name == "survey_foreign.csv" else None
    return read_log(folder / name, sha256="0" * 64, columns=columns).log


def test_the_generator_makes_the_same_files(tmp_path: Path) -> None:
    """To the last digit written, or the one before it: another processor may round a sine otherwise."""
    write_flights(tmp_path)
    made = {path.name for path in tmp_path.iterdir()}
    assert made == {path.name for path in FOLDER.iterdir() if path.is_file()} - {"README.md", "client.py"}
    for name in ("settings.json", "settings_foreign.json", "truth.json"):
        assert not list(differences(*(json.loads((folder / name).read_text()) for folder in (tmp_path, FOLDER)))), name
    for name in CASES:
        new, old = decoded(tmp_path, name), decoded(FOLDER, name)
        assert new.start_utc == old.start_utc
        for stream, columns in STREAMS.items():
            for column in ("time_s", *columns):
                fresh, kept = (getattr(getattr(log, stream), column, None) for log in (new, old))
                assert (fresh is None) == (kept is None)
                if fresh is not None and kept is not None:
                    np.testing.assert_allclose(fresh, kept, rtol=2e-6, atol=0.021, err_msg=f"{name} {column}")


def test_they_stay_small() -> None:
    assert sum(path.stat().st_size for path in FOLDER.rglob("*") if path.is_file()) < MOST_BYTES


@pytest.fixture(scope="module")
def address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    app = create_app(Config(data=tmp_path_factory.mktemp("data"), log_level="ERROR"))
    server = make_server("127.0.0.1", 0, app, threaded=True)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield f"http://127.0.0.1:{server.port}"
    server.shutdown()
    thread.join()
    server.server_close()


def client_says(address: str, *arguments: str) -> "subprocess.CompletedProcess[str]":
    command = [sys.executable, "-I", str(FOLDER / "client.py"), "--server", address, *arguments]
    return subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)


@pytest.mark.parametrize(
    ("arguments", "code", "told"),
    [
        (("survey.ulg", "--settings", "settings.json"), 0, "factor on speed to load: 0.9398"),
        (("survey.json", "--gzip"), 0, "caution, "),
        (("survey.csv", "--settings", "settings.json", "--gzip"), 0, "wind: 5.05"),
        (("half_circle.json",), 3, "verdict: refused"),
    ],
)
def test_the_client(address: str, arguments: tuple[str, ...], code: int, told: str) -> None:
    paths = [argument if argument.startswith("--") else str(FOLDER / argument) for argument in arguments]
    ran = client_says(address, *paths)
    assert (ran.returncode, ran.stderr) == (code, "")
    assert told in ran.stdout
    assert "never a stall-warning device" in ran.stdout


def test_the_client_tells_what_was_wrong(address: str, tmp_path: Path) -> None:
    wrong = tmp_path / "settings.json"
    wrong.write_text('{"aircraft": {"mass_kg": -1}}')
    ran = client_says(address, str(FOLDER / "half_circle.json"), "--settings", str(wrong))
    assert ran.returncode == 1
    assert "(422)" in ran.stderr
    assert "/settings/aircraft/mass_kg" in ran.stderr


def test_the_batch_compressed(client: FlaskClient) -> None:
    body = gzip.compress((FOLDER / "half_circle.json").read_bytes())
    headers = {"Content-Encoding": "gzip", "Content-Type": "application/json"}
    assert client.post("/v1/reductions", data=body, headers=headers).status_code == 200

"""README, DEVELOPERS and the samples' README: what they say exists, and nothing that exists is left out."""

import dataclasses
import gzip
import importlib.util
import json
import re
import shlex
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any, NamedTuple

import pytest
from flask.testing import FlaskClient

from samples.client import multipart
from schemas.settings import load_settings
from service.cli import _parser as command_parser
from service.config import PREFIX, Config, variable_of
from service.domain.codes import CAUTIONS, FaultKind, Flag, Reason, Verdict, ZeroOffsetSource
from service.domain.settings import (
    Aircraft,
    Configuration,
    ConfigurationTime,
    ProbeSettings,
    Settings,
    WarningSettings,
    Window,
)
from service.http.openapi import openapi_document
from service.intake import reduce_file
from service.readers.units import to_si
from service.summary import summary_text
from tests.contract.conftest import KeptClient

ROOT = Path(__file__).parents[2]
NAMES = ("README.md", "DEVELOPERS.md", "samples/README.md")
TEXTS = {name: (ROOT / name).read_text() for name in NAMES}
README = TEXTS["README.md"]
DEVELOPERS = TEXTS["DEVELOPERS.md"]
SERVER = "http://127.0.0.1:8000"
"""Codes of the contract that this version never gives."""


def blocks(text: str, language: str) -> Iterator[str]:
    """Contents of the fenced blocks of a language."""
    yield from re.findall(rf"^```{language}\n(.*?)^```", text, re.MULTILINE | re.DOTALL)


def commands(name: str) -> Iterator[str]:
    for block in blocks(TEXTS[name], "sh"):
        yield from (line for line in block.splitlines() if line.strip() and not line.startswith("#"))


def first_cells(text: str, heading: str) -> list[list[str]]:
    """Rows of the first table below a heading."""
    below = text[text.index(f"\n{heading}\n") :]
    lines = re.search(r"(?:^\|.*\n)+", below, re.MULTILINE)
    assert lines, heading
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines[0].splitlines()[2:]]


def unquoted(cells: Iterable[str]) -> list[str]:
    return [cell.strip("`") for cell in cells]


# --- links, paths and commands ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_links_lead_somewhere(name: str) -> None:
    targets = re.findall(r"\]\(([^)#]+)\)", TEXTS[name])
    missing = [t for t in targets if "://" not in t and not ((ROOT / name).parent / t).exists()]
    assert missing == []


@pytest.mark.parametrize("name", NAMES)
def test_paths_exist(name: str) -> None:
    folders = "service|schemas|tests|samples"
    paths = re.findall(rf"(?<![\w./-])((?:{folders})/[\w./-]*\w(?:\.\w+)?/?)", TEXTS[name])
    assert paths
    assert [path for path in paths if not (ROOT / path).exists()] == []


def test_shorthand_paths_of_the_reduction_exist() -> None:
    short = re.findall(r"`((?:fit|reduction|airdata)/\w+\.py)`", DEVELOPERS)
    places = (ROOT / "service", ROOT / "service/reduction")
    assert len(short) > 8
    assert [path for path in short if not any((place / path).exists() for place in places)] == []


def test_the_tree_of_developers_is_the_tree() -> None:
    tree = next(block for block in blocks(DEVELOPERS, "text") if block.startswith("service/\n"))
    folder, missing, listed = "", [], set()
    for line in tree.splitlines():
        entry = line.split()[0]
        folder = folder if line.startswith(" ") else entry
        path = folder + entry if line.startswith(" ") else entry
        listed.add(path.rstrip("/"))
        if not (ROOT / path).exists():
            missing.append(path)
    assert missing == []
    for package in ("service", "tests"):
        inside = {p for p in (ROOT / package).iterdir() if p.is_dir() and p.name != "__pycache__"}
        assert {f"{package}/{p.name}" for p in inside} <= listed
    modules = {f"service/{p.name}" for p in (ROOT / "service").glob("*.py")} - {"service/__init__.py"}
    assert modules <= listed


@pytest.mark.parametrize("name", NAMES)
def test_modules_to_run_exist(name: str) -> None:
    modules = set(re.findall(r"python -m (tests[\w.]*)", TEXTS[name]))
    assert [module for module in modules if importlib.util.find_spec(module) is None] == []


@pytest.mark.parametrize("name", NAMES)
def test_loiterwise_commands_are_understood(name: str) -> None:
    for line in commands(name):
        for words in re.findall(r"(?:^|[ /])loiterwise ((?:reduce|serve|work|migrate|sweep|keys)\b[^&|#]*)", line):
            given = command_parser().parse_args(shlex.split(words))
            assert (ROOT / getattr(given, "file", ".")).exists()
            assert (ROOT / (getattr(given, "settings", None) or ".")).exists()


def test_options_that_the_readme_names_exist() -> None:
    for option in ("--include", "--pretty", "--settings"):
        assert option in README
    given = command_parser().parse_args(["reduce", "-", "--include", "airspeed,stall_margins,faults", "--pretty"])
    assert given.include == {"airspeed", "stall_margins", "faults"}


def test_the_two_commands_stand_in_the_readme() -> None:
    install, test = list(commands("README.md"))[:2]
    assert install.startswith("python3 -m venv .venv && .venv/bin/pip install -q . && .venv/bin/loiterwise reduce ")
    assert f'test_command="{test}"' in (ROOT / ".ci/run").read_text()
    assert test in DEVELOPERS


# --- calls ------------------------------------------------------------------------------------------------------------


class Call(NamedTuple):
    method: str
    path: str
    headers: dict[str, str]
    body: bytes | None


def as_call(line: str) -> Call:
    """A `curl` line as the request that it makes; fails for what this does not know."""
    words = shlex.split(line, comments=True)
    piped, method = b"", None
    if words[:2] == ["gzip", "-c"]:
        piped, words = gzip.compress((ROOT / words[2]).read_bytes()), words[4:]
    assert words.pop(0) == "curl"
    headers: dict[str, str] = {}
    forms: dict[str, bytes] = {}
    body, url = None, ""
    while words:
        word = words.pop(0)
        if word == "-H":
            name, _, value = words.pop(0).partition(": ")
            headers[name] = value
        elif word == "-F":
            name, _, path = words.pop(0).partition("=@")
            forms[name] = (ROOT / path).read_bytes()
        elif word == "--data-binary":
            path = words.pop(0).removeprefix("@")
            body = piped if path == "-" else (ROOT / path).read_bytes()
        elif word == "-X":
            method = words.pop(0)
        elif word == "-d":
            body = words.pop(0).encode()
        else:
            assert word.startswith(SERVER), word
            url = word.removeprefix(SERVER)
    if forms:
        headers["Content-Type"], body = multipart(forms["log"], forms["settings"])
    return Call(method or ("GET" if body is None else "POST"), url, headers, body)


ALL_CURLS = [line for name in NAMES for line in commands(name) if re.search(r"\bcurl ", line)]
KEPT_CURLS = [line for line in ALL_CURLS if re.search(r"/v1/(?:flights|aircraft)", line)]
CURLS = sorted(set(ALL_CURLS) - set(KEPT_CURLS))


@pytest.mark.parametrize("line", CURLS, ids=range(len(CURLS)))
def test_a_curl_line_is_answered(client: FlaskClient, line: str) -> None:
    call = as_call(line)
    response = client.open(call.path, method=call.method, headers=call.headers, data=call.body)
    assert response.status_code == 200, response.text
    if call.method == "POST":
        refused = "half_circle" in line
        assert (response.get_json()["calibration"]["verdict"] == Verdict.REFUSED) is refused


def test_every_path_of_the_service_is_called_by_an_example() -> None:
    assert len(CURLS) >= 12
    paths = {as_call(line).path.partition("?")[0] for line in CURLS}
    assert paths == {"/v1/reductions", "/v1/health/live", "/v1/health/ready", "/v1/openapi.json", "/docs"}


def test_the_lines_about_kept_flights_are_answered_in_their_order(kept: KeptClient) -> None:
    flight = ""
    with kept.worker():
        for line in KEPT_CURLS:
            call = as_call(line.replace("$FLIGHT", flight))
            answer = kept.client.open(call.path, method=call.method, headers=call.headers, data=call.body)
            assert answer.status_code in {200, 201, 202, 204}, (line, answer.text)
            if not flight and call.method == "POST":
                flight = answer.get_json()["flight"]


def test_every_call_about_kept_flights_has_its_line() -> None:
    shown = {(call.method, templated(call.path)) for call in map(as_call, KEPT_CURLS)}
    documented = {
        (method.upper(), path)
        for path, methods in openapi_document()["paths"].items()
        if path.startswith(("/v1/flights", "/v1/aircraft"))
        for method in methods
    }
    assert shown == documented
    table = {
        (method, path)
        for row in first_cells(README, "### Flights that are kept")
        for method in re.findall(r"[A-Z]{3,}", row[0])
        for path in re.findall(r"/[\w/{}-]+", row[0])
    }
    assert {path for _, path in table if path.startswith("/v1")} <= {path for _, path in documented}


def templated(path: str) -> str:
    """The path of a line as the document writes it."""
    bare = path.partition("?")[0].replace("$FLIGHT", "{flight}").replace("brackenwing", "{aircraft}")
    return re.sub(r"/reductions/\d+$", "/reductions/{number}", bare)


def test_the_problem_shown_is_the_problem_given(client: FlaskClient) -> None:
    shown = json.loads(next(block for block in blocks(README, "json") if "#problem" in block))
    content_type, body = multipart((ROOT / "samples/half_circle.json").read_bytes(), b'{"aircraft":{"mass_kg":0}}')
    given = client.post("/v1/reductions", data=body, content_type=content_type).get_json()
    assert given | {"request_id": "…"} == shown


def test_the_summary_shown_is_the_summary_given() -> None:
    """Line by line, but for the digits: those of the scale are compared."""
    settings = json.loads((ROOT / "samples/settings.json").read_text())
    reduction = reduce_file(ROOT / "samples/survey.ulg", sha256="0" * 64, settings=settings)
    given = {masked(line) for line in summary_text(reduction).splitlines()}
    shown = next(block for block in blocks(README, "text") if block.startswith("Verdict"))
    assert [line for line in shown.splitlines() if masked(line) not in given] == []
    scale = reduction.calibration.speed_scale
    assert scale is not None
    written = re.search(r"^speed scale +([\d.]+) ± ([\d.]+)", shown, re.MULTILINE)
    assert written
    assert abs(float(written[1]) - scale.value) < 0.2 * scale.standard_uncertainty
    assert float(written[2]) == pytest.approx(scale.standard_uncertainty, rel=0.2)


def masked(line: str) -> str:
    return re.sub(r"-?\d+(?:\.\d+)?", "#", line)


# --- lists ------------------------------------------------------------------------------------------------------------


def test_every_environment_variable_with_its_default() -> None:
    rows = {unquoted(row)[0]: unquoted(row)[1] for row in first_cells(README, "### Configuration")}
    assert rows.pop("PORT") == "8000"
    defaults = {variable_of(field.name): getattr(Config(), field.name) for field in dataclasses.fields(Config)}
    assert rows == {
        name: "none" if value is None else f"{value:g}" if isinstance(value, float) else str(value)
        for name, value in defaults.items()
    }
    named = {word for text in TEXTS.values() for word in re.findall(rf"{PREFIX}[A-Z_]+", text)}
    assert named <= set(defaults)


def test_every_setting_with_its_default() -> None:
    rows = {unquoted(row)[0]: row[2] for row in first_cells(README, "### Settings")}
    groups = {"aircraft.": Aircraft, "….": Configuration, "probe.": ProbeSettings, "warnings.": WarningSettings}
    expected = {prefix + field.name for prefix, cls in groups.items() for field in dataclasses.fields(cls)}
    whole = {field.name for field in dataclasses.fields(Settings)} - {"aircraft", "probe", "warnings"}
    assert set(rows) == expected | whole
    for prefix, made in (("probe.", ProbeSettings()), ("warnings.", WarningSettings())):
        for field in dataclasses.fields(made):
            default = getattr(made, field.name)
            if default is not None:
                assert rows[prefix + field.name] == f"{default:g}"
    section = README[README.index("\n### Settings\n") : README.index("\n## What the answer says")]
    for cls in (ConfigurationTime, Window):
        assert all(f"`{field.name}`" in section for field in dataclasses.fields(cls))


def test_every_reason_and_fault_has_its_row() -> None:
    reasons = first_cells(README, "### Verdict and reasons")
    assert unquoted(row[0] for row in reasons) == [str(reason) for reason in Reason]
    assert all(len(row) == 3 and row[1] and row[2] for row in reasons)
    assert unquoted(row[0] for row in first_cells(README, "### Faults")) == [str(kind) for kind in FaultKind]


def test_every_flag_caution_and_source_is_named() -> None:
    section = README[README.index("\n### Flags of a sample\n") : README.index("\n### Stall margins")]
    assert set(re.findall(r"`(\w+)`", section)) == {str(flag.name).lower() for flag in Flag}
    cautions = README[README.index("\n## Cautions\n") : README.index("\n## What it does not do")]
    assert re.findall(r"^- (.*)$", cautions, re.MULTILINE) == list(CAUTIONS.values())
    assert all(f"`{source}`" in README for source in ZeroOffsetSource)
    assert all(f"`{verdict}`" in README for verdict in Verdict)


def test_every_code_is_given_somewhere() -> None:
    sources = "".join(path.read_text() for path in (ROOT / "service").rglob("*.py") if path.name != "codes.py")
    assert not {code for code in (*Reason, *Flag) if f"{type(code).__name__}.{code.name}" not in sources}


def test_every_unit_of_the_table_is_read() -> None:
    columns = {
        "time": "time_s",
        "pressure": "static_pressure_pa",
        "temperature": "air_temperature_k",
        "speed": "ground_speed_mps",
        "angle": "track_deg",
        "altitude": "altitude_m",
        "load factor": "load_factor",
        "humidity": "relative_humidity",
    }
    rows = first_cells(README, "### CSV")
    assert [row[0] for row in rows] == list(columns)
    for quantity, units in rows:
        for unit in re.findall(r"`([^`]+)`", units):
            assert to_si(columns[quantity], unit).factor > 0


def test_the_mapping_shown_is_read() -> None:
    shown = json.loads(next(block for block in blocks(README, "json") if '"columns"' in block))
    assert set(load_settings(shown).columns) == {"GS", "static"}


def test_the_factor_forms_shown() -> None:
    """K, its root and c = 2K/rho0 belong together."""
    rows: Any = first_cells(README, "## What to do with a factor")
    speed, pressure, constant = (float(row[2].split()[0]) for row in rows)
    assert speed == pytest.approx(pressure**0.5, abs=5e-4)
    assert constant == pytest.approx(2 * pressure / 1.225, abs=1e-3)

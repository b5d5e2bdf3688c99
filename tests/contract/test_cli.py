"""The console command: what goes where, and how it ends."""

import gzip
import io
import json
import os
import pty
import select
import subprocess
import sys
import termios
from pathlib import Path
from typing import Any

import pytest

from service import cli
from service.cli import main
from service.domain.codes import CAUTIONS
from service.version import SERVICE
from service.work.settings import WorkSettings
from tests import made

BATCH = json.dumps(made.batch()).encode()


@pytest.fixture
def flight(tmp_path: Path) -> Path:
    path = tmp_path / "flight.json"
    path.write_bytes(BATCH)
    return path


@pytest.fixture(autouse=True)
def spool_within_the_test(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("LOITERWISE_DATA", str(tmp_path / "data"))


def answer(capsys: pytest.CaptureFixture[str]) -> tuple[dict[str, Any], str]:
    captured = capsys.readouterr()
    return json.loads(captured.out), captured.err


def test_an_answer(flight: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["reduce", str(flight)]) == 0
    document, text = answer(capsys)
    assert document["calibration"]["verdict"] in ("accepted", "doubtful")
    assert "airspeed" not in document
    assert f"Verdict: {document['calibration']['verdict'].upper()}" in text
    assert "speed scale" in text
    for sentence in CAUTIONS.values():
        assert sentence in text


def test_include_and_pretty(flight: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["reduce", str(flight), "--include", "airspeed, faults", "--pretty"]) == 0
    out = capsys.readouterr().out
    assert "\n  " in out
    assert "airspeed" in json.loads(out)


def test_settings(flight: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "settings.json"
    path.write_text(json.dumps({"probe": {"applied_speed_scale": 2.0}}))
    assert main(["reduce", str(flight), "--settings", str(path)]) == 0
    calibration = answer(capsys)[0]["calibration"]
    ratio = calibration["total_speed_scale"]["value"] / calibration["speed_scale"]["value"]
    assert ratio == pytest.approx(2.0)


def test_gzip(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "flight.json.gz"
    path.write_bytes(gzip.compress(BATCH))
    assert main(["reduce", str(path)]) == 0
    assert answer(capsys)[0]["inputs"]["format"] == "batch"
    assert list((tmp_path / "data" / "spool").iterdir()) == []


@pytest.mark.parametrize("sent", [BATCH, gzip.compress(BATCH)])
def test_standard_input(sent: bytes, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(sent)))
    assert main(["reduce", "-"]) == 0
    assert answer(capsys)[0]["inputs"]["format"] == "batch"


def test_the_same_bytes_have_the_same_hash(
    flight: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    main(["reduce", str(flight)])
    from_file = answer(capsys)[0]["inputs"]["sha256"]
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(BATCH)))
    main(["reduce", "-"])
    assert answer(capsys)[0]["inputs"]["sha256"] == from_file


def test_refused(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "straight.json"
    batch = made.batch()
    batch["gps"]["velocity_east_mps"] = [0.0] * len(batch["gps"]["time_s"])
    batch["gps"]["velocity_north_mps"] = [17.0] * len(batch["gps"]["time_s"])
    path.write_text(json.dumps(batch))
    assert main(["reduce", str(path)]) == 3
    document, text = answer(capsys)
    assert document["calibration"]["verdict"] == "refused"
    assert document["calibration"]["reasons"][0]["message"] in text


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "empty"),
        (b"\0\1\2", "no log"),
        (b"{", "JSON"),
        (b'{"probe": {}}', "/gps"),
        (gzip.compress(b"a")[:-3], "gzip"),
    ],
)
def test_what_cannot_be_reduced(
    content: bytes, message: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "flight"
    path.write_bytes(content)
    assert main(["reduce", str(path)]) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert message in captured.err
    assert all(line.startswith("loiterwise: ") for line in captured.err.splitlines())


@pytest.mark.parametrize("settings", ["{", '{"wings": 2}', "[]", '{"probe": {"zero_offset_pa": NaN}}'])
def test_wrong_settings(settings: str, flight: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "settings.json"
    path.write_text(settings)
    assert main(["reduce", str(flight), "--settings", str(path)]) == 2
    assert capsys.readouterr().err.startswith("loiterwise: ")


@pytest.mark.parametrize("name", ["absent.ulg", "."])
def test_no_such_file(name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["reduce", str(tmp_path / name)]) == 2
    assert str(tmp_path) in capsys.readouterr().err


@pytest.mark.parametrize("arguments", [[], ["reduce"], ["reduce", "x", "--include", "wind"], ["fly"]])
def test_wrong_use(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as caught:
        main(arguments)
    assert caught.value.code == 2
    assert "usage: loiterwise" in capsys.readouterr().err


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as caught:
        main(["--version"])
    assert caught.value.code == 0
    assert capsys.readouterr().out == f"loiterwise {SERVICE}\n"


def test_our_own_failure_has_no_traceback(
    flight: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("service.intake.reduce_flight", lambda *_arguments, **_named: 1 / 0)
    assert main(["reduce", str(flight)]) == 1
    assert capsys.readouterr().err.startswith("loiterwise: internal failure (ZeroDivisionError)")


def test_an_interrupt(flight: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupt(*_arguments: object, **_named: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("service.intake.reduce_flight", interrupt)
    assert main(["reduce", str(flight)]) == 130


def test_a_reader_that_has_seen_enough(flight: Path) -> None:
    command = f"{sys.executable} -c 'import sys; from service.cli import main; sys.exit(main())' reduce {flight}"
    shell = ["bash", "-c", f"set -o pipefail; {command} 2>errors | head -c 1; exit ${{PIPESTATUS[0]}}"]
    done = subprocess.run(
        shell,
        cwd=flight.parent,
        env=os.environ | {"PYTHONPATH": str(Path(__file__).parents[2])},
        stdout=subprocess.PIPE,
        check=False,
    )
    assert done.returncode == 0
    assert "Error" not in (flight.parent / "errors").read_text()


def test_a_bar_on_a_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cli, "PROGRESS_AFTER_S", 0.0)
    ours, theirs = pty.openpty()
    termios.tcsetwinsize(theirs, (24, 80))
    with os.fdopen(theirs, "w") as terminal:
        monkeypatch.setattr(sys, "stderr", terminal)
        with cli._progress_bar() as progress:
            assert progress is not None
            progress(0.25)
            progress(1.0)
        terminal.flush()
        assert select.select([ours], [], [], 10)[0]
        assert b"reducing" in os.read(ours, 10_000)
    os.close(ours)


def test_no_bar_elsewhere(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "stderr", io.StringIO())
    with cli._progress_bar() as progress:
        assert progress is None


def test_serve_checks_before_it_starts(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    monkeypatch.setenv("LOITERWISE_ACCESS", "keys")
    monkeypatch.delenv("LOITERWISE_KEY", raising=False)
    assert main(["serve"]) == 2
    assert "LOITERWISE_KEY" in capsys.readouterr().err


def test_serve_starts_the_server_beside_workers(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    started: list[tuple[WorkSettings, list[str]]] = []
    for name in ("BIND", "WORKERS", "THREADS", "DATA", "DATABASE_URL", "JOB_WORKERS"):
        monkeypatch.setenv(f"LOITERWISE_{name}", "")
    monkeypatch.chdir(tmp_path)

    def supervise(settings: WorkSettings, *, beside: list[str]) -> int:
        started.append((settings, beside))
        return 7

    monkeypatch.setattr("service.work.supervise.supervise", supervise)
    assert main(["serve", "--bind", "127.0.0.1:9999", "--workers", "3"]) == 7
    ((settings, command),) = started
    assert command[1:] == ["-m", "gunicorn", "-c", "python:service.server", "service.app:create_app()"]
    assert (os.environ["LOITERWISE_BIND"], os.environ["LOITERWISE_WORKERS"]) == ("127.0.0.1:9999", "3")
    # nothing is said of a place: under the working directory, for the server as for the workers
    assert os.environ["LOITERWISE_DATA"] == settings.store == str(tmp_path / "loiterwise-data")
    assert settings.workers == 2
    assert (tmp_path / "loiterwise-data/loiterwise.sqlite").exists()

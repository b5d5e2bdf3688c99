"""The production server on a real port: streaming, limits, slow clients, the end."""

import http.client
import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any, NamedTuple

import pytest

from tests import made

ROOT = Path(__file__).parents[2]
URL = "/v1/reductions"
BATCH = json.dumps(made.batch()).encode()
MOST_BYTES = 2_000_000


class Server(NamedTuple):
    process: "subprocess.Popen[bytes]"
    port: int
    data: Path
    log: Path

    def connect(self) -> http.client.HTTPConnection:
        return http.client.HTTPConnection("127.0.0.1", self.port, timeout=30)

    def ask(self, method: str, path: str, **more: Any) -> tuple[int, Any]:
        connection = self.connect()
        connection.request(method, path, **more)
        answer = connection.getresponse()
        body = json.loads(answer.read())
        connection.close()
        return answer.status, body


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Server]:
    folder = tmp_path_factory.mktemp("server")
    port, log = free_port(), folder / "log"
    environment = {name: value for name, value in os.environ.items() if not name.startswith("LOITERWISE_")}
    environment |= {
        "PYTHONPATH": str(ROOT),
        "PORT": str(port),
        "LOITERWISE_DATA": str(folder / "data"),
        "LOITERWISE_WORKERS": "1",
        "LOITERWISE_JOB_WORKERS": "1",
        "LOITERWISE_MAX_UPLOAD_BYTES": str(MOST_BYTES),
        "LOITERWISE_UPLOAD_GRACE_S": "1",
        "LOITERWISE_MIN_UPLOAD_RATE": "1000000000",
    }
    command = [sys.executable, "-c", "import sys; from service.cli import main; sys.exit(main())", "serve"]
    with log.open("wb") as errors:
        process = subprocess.Popen(command, cwd=folder, env=environment, stderr=errors)
    started = Server(process, port, folder / "data", log)
    try:
        wait_until_live(started)
        yield started
    finally:
        process.terminate()
        process.wait(30)


def wait_until_live(server: Server) -> None:
    for _ in range(300):
        assert server.process.poll() is None, server.log.read_text()
        try:
            assert server.ask("GET", "/v1/health/live") == (200, {"status": "live"})
            return
        except ConnectionRefusedError:
            time.sleep(0.1)
    raise AssertionError(server.log.read_text())


def spooled(server: Server) -> list[Path]:
    return list((server.data / "spool").iterdir())


def test_a_body_of_known_length(server: Server) -> None:
    status, document = server.ask("POST", URL, body=BATCH, headers={"Content-Type": "application/json"})
    assert status == 200
    assert document["inputs"]["format"] == "batch"


def test_a_chunked_body(server: Server) -> None:
    pieces = (BATCH[at : at + 10_000] for at in range(0, len(BATCH), 10_000))
    headers = {"Content-Type": "application/octet-stream", "Transfer-Encoding": "chunked"}
    status, document = server.ask("POST", URL, body=pieces, headers=headers, encode_chunked=True)
    assert status == 200
    assert document["inputs"]["samples"]["probe"] == len(made.batch()["probe"]["time_s"])


def test_a_chunked_body_without_end_is_stopped(server: Server) -> None:
    pieces = (b"\0" * 100_000 for _ in range(MOST_BYTES // 100_000 + 1))
    headers = {"Content-Type": "application/octet-stream", "Transfer-Encoding": "chunked"}
    status, problem = server.ask("POST", URL, body=pieces, headers=headers, encode_chunked=True)
    assert (status, problem["status"]) == (413, 413)


def test_too_large_by_its_length_is_answered_before_the_body(server: Server) -> None:
    connection = server.connect()
    connection.putrequest("POST", URL)
    connection.putheader("Content-Type", "application/octet-stream")
    connection.putheader("Content-Length", str(MOST_BYTES + 1))
    connection.endheaders()
    assert connection.getresponse().status == 413
    connection.close()


def test_a_client_that_trickles_is_told_and_its_thread_is_free_again(server: Server) -> None:
    connection = server.connect()
    connection.putrequest("POST", URL)
    connection.putheader("Content-Type", "application/octet-stream")
    connection.putheader("Content-Length", "1000")
    connection.endheaders(b"a few")
    answer = connection.getresponse()
    assert (answer.status, json.loads(answer.read())["type"]) == (408, "/docs#problem-too-slow")
    connection.close()
    assert spooled(server) == []


def test_a_client_that_leaves_holds_nothing(server: Server) -> None:
    with socket.create_connection(("127.0.0.1", server.port), timeout=30) as client:
        head = f"POST {URL} HTTP/1.1\r\nHost: x\r\nContent-Type: text/csv\r\nContent-Length: 99\r\n\r\nhalf"
        client.sendall(head.encode())
        client.shutdown(socket.SHUT_WR)
        assert client.recv(100).startswith(b"HTTP/1.1 400")
    assert spooled(server) == []


def test_a_kept_connection_serves_on_after_an_error(server: Server) -> None:
    connection = server.connect()
    for _ in range(2):
        connection.request("POST", URL, body=b"x" * 1000, headers={"Content-Type": "image/png"})
        answer = connection.getresponse()
        answer.read()
        assert answer.status == 415
    connection.close()


def test_a_flight_is_kept_and_reduced_by_a_worker(server: Server) -> None:
    headers = {"Content-Type": "application/json", "Idempotency-Key": "once"}
    status, document = server.ask("POST", "/v1/flights?aircraft=kite", body=BATCH, headers=headers)
    assert (status, document["state"]) == (201, "done")
    assert document["calibration"]["speed_scale"] is not None
    again = server.ask("POST", "/v1/flights?aircraft=kite", body=BATCH, headers=headers)
    assert again == (201, document)
    connection = server.connect()
    connection.request("GET", f"/v1/flights/{document['flight']}/log")
    assert connection.getresponse().read() == BATCH
    connection.close()
    assert server.ask("GET", f"/v1/flights/{document['flight']}/airspeed?to_s=10")[1]["time_s"]
    assert server.ask("GET", "/v1/health/ready")[0] == 200
    # the child may not have tidied up yet
    assert [path for path in spooled(server) if path.name.startswith("loiterwise-upload-")] == []


def test_it_listens_on_loopback_only_while_open(server: Server) -> None:
    assert f"127.0.0.1:{server.port}" in server.log.read_text()


def test_its_log_is_lines_of_json(server: Server) -> None:
    server.ask("GET", "/v1/health/live", headers={"X-Request-Id": "looked-for"})
    lines = [json.loads(line) for line in server.log.read_text().splitlines()]
    assert {"time", "level", "logger", "message"} <= set.intersection(*(set(line) for line in lines))
    (ours,) = [line for line in lines if line.get("request_id") == "looked-for"]
    assert (ours["method"], ours["path"], ours["status"]) == ("GET", "/v1/health/live", 200)


def test_it_ends_when_told_to(server: Server) -> None:
    """The last test of this file: nothing after it finds a server."""
    server.process.send_signal(signal.SIGTERM)
    assert server.process.wait(30) == 0
    assert "Traceback" not in server.log.read_text()

#!/usr/bin/env python3
"""Sends a flight to a Loiterwise server and prints factor, wind and warnings. Needs nothing but Python.

    python3 samples/client.py samples/survey.ulg --settings samples/settings.json
    python3 samples/client.py samples/survey.json --gzip

Exit codes: 0 answered, 3 answered but refused, 1 the server said no or cannot be reached.
"""

import argparse
import gzip
import json
import sys
import urllib.error
import urllib.request
import uuid
from pathlib import Path
from typing import Any


def multipart(log: bytes, settings: bytes) -> tuple[str, bytes]:
    """Content-Type and body of a form with the parts `log` and `settings`."""
    boundary = uuid.uuid4().hex
    parts = (
        ('name="log"; filename="log"', "application/octet-stream", log),
        ('name="settings"', "application/json", settings),
    )
    body = b"".join(
        f"--{boundary}\r\nContent-Disposition: form-data; {name}\r\nContent-Type: {kind}\r\n\r\n".encode()
        + content
        + b"\r\n"
        for name, kind, content in parts
    )
    return f"multipart/form-data; boundary={boundary}", body + f"--{boundary}--\r\n".encode()


def reduction_of(
    log: bytes, settings: bytes | None, *, server: str, key: str | None, zipped: bool, include: str
) -> dict[str, Any]:
    """The answer of the service; `urllib.error.HTTPError` when it says no."""
    kind, body = ("application/octet-stream", log) if settings is None else multipart(log, settings)
    headers = {"Content-Type": kind, "Accept": "application/json"}
    if zipped:
        headers["Content-Encoding"], body = "gzip", gzip.compress(body)
    if key:
        headers["Authorization"] = f"Bearer {key}"
    query = f"?include={include}" if include else ""
    request = urllib.request.Request(f"{server.rstrip('/')}/v1/reductions{query}", body, headers, method="POST")
    with urllib.request.urlopen(request, timeout=120) as answer:
        return dict(json.load(answer))


def lines(answer: dict[str, Any]) -> list[str]:
    """What matters most, for people."""
    calibration = answer["calibration"]
    told = [f"verdict: {calibration['verdict']}"]
    told += [f"  {reason['code']}: {reason['message']}" for reason in calibration["reasons"]]
    if calibration["total_speed_scale"]:
        told.append(f"factor on speed to load: {estimate(calibration['total_speed_scale'], 4)}")
        told.append(f"zero offset: {estimate(calibration['zero_offset_pa'], 1)} Pa")
    if answer["wind"]["speed_mps"]:
        direction = answer["wind"]["from_deg"]
        whence = f", from {direction['value']:.0f} deg" if direction else ""
        told.append(f"wind: {estimate(answer['wind']['speed_mps'], 2)} m/s{whence}")
    for warning in answer["stall_warnings"]:
        told.append(f"{warning['level']}, {warning['start_s']:.1f} to {warning['end_s']:.1f} s: {warning['message']}")
    for fault in answer["faults"]:
        told.append(f"fault {fault['fault']} of the {fault['sensor']}: {fault['message']}")
    return told + [f"note: {caution['message']}" for caution in answer["cautions"]]


def estimate(given: dict[str, Any], digits: int) -> str:
    """Value and 95 % interval."""
    low, high = given["interval_95"]
    return f"{given['value']:.{digits}f} (95 %: {low:.{digits}f} to {high:.{digits}f})"


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("file", type=Path)
    parser.add_argument("--settings", type=Path, help="settings to send beside the file")
    parser.add_argument("--server", default="http://127.0.0.1:8000")
    parser.add_argument("--key", help="where the server asks for one")
    parser.add_argument("--gzip", action="store_true", help="send the body compressed")
    parser.add_argument("--include", default="", help="airspeed, stall_margins, faults; comma-separated")
    parser.add_argument("--json", action="store_true", help="print the whole answer")
    given = parser.parse_args()
    settings = given.settings.read_bytes() if given.settings else None
    try:
        answer = reduction_of(
            given.file.read_bytes(),
            settings,
            server=given.server,
            key=given.key,
            zipped=given.gzip,
            include=given.include,
        )
    except urllib.error.HTTPError as error:
        problem = json.load(error)
        print(f"{problem['title']} ({problem['status']}): {problem['detail']}", file=sys.stderr)
        for pointer, message in problem.get("errors", {}).items():
            print(f"  {pointer}: {message}", file=sys.stderr)
        return 1
    except urllib.error.URLError as error:
        print(f"no server at {given.server}: {error.reason}", file=sys.stderr)
        return 1
    print(json.dumps(answer, indent=2) if given.json else "\n".join(lines(answer)))
    return 3 if answer["calibration"]["verdict"] == "refused" else 0


if __name__ == "__main__":
    sys.exit(main())

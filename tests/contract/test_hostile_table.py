"""Hostile bodies by name, each with the exact answer that it must get.

What a file cannot hold is a clear 4xx; what is readable but holds no calibration is 200, refused, with the reason.
"""

import gzip
import json
import struct
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Any, NamedTuple

import numpy as np
import pytest
from flask.testing import FlaskClient

from service.domain.log import DecodedLog
from tests import made
from tests.hostile.bases import as_ulog
from tests.hostile.cases import BOUNDARY, URL, multipart
from tests.hostile.judge import judge
from tests.hostile.ulog_damage import DATA, SUBSCRIPTION, joined, messages
from tests.synthetic.ulog_file import HEADER, Variant
from tests.unit.readers.example import as_table, circling_log

RAW, CSV, JSON = "application/octet-stream", "text/csv", "application/json"
FORM = f"multipart/form-data; boundary={BOUNDARY}"
MIB = 1024 * 1024


class Row(NamedTuple):
    status: int
    body: Callable[[], bytes]
    media_type: str = RAW
    says: str = ""
    """Part of the detail or the errors; with 200 of the codes of the reasons."""
    headers: Mapping[str, str] = {}


# --- makers of bodies -------------------------------------------------------------------------------------------------


def batch(**parts: Any) -> bytes:
    """The batch by hand with other streams or settings."""
    return json.dumps(made.batch() | parts).encode()


def probe(**columns: Any) -> bytes:
    """The batch with changed columns of its probe."""
    return batch(probe=made.batch()["probe"] | columns)


def gps(**columns: Any) -> bytes:
    """The batch with changed columns of its GPS."""
    return batch(gps=made.batch()["gps"] | columns)


def probe_times(change: Callable[[list[float]], list[float]]) -> bytes:
    return probe(time_s=change(made.batch()["probe"]["time_s"]))


def token(text: bytes) -> bytes:
    """The batch with the first number of a column replaced."""
    return batch().replace(b'"impact_pressure_pa": [', b'"impact_pressure_pa": [' + text + b", ", 1)


def nulls(stream: str, *names: str) -> bytes:
    columns = made.batch()[stream]
    return batch(**{stream: columns | {name: [None] * len(columns[name]) for name in names}})


def kept(stream: str, count: int) -> bytes:
    """The batch with the first samples of a stream alone."""
    return batch(**{stream: {name: values[:count] for name, values in made.batch()[stream].items()}})


def table() -> str:
    return as_table(circling_log(12.0))


def cell(text: str) -> bytes:
    """The table with another first pressure."""
    lines = table().split("\n")
    row = lines[1].split(",")
    row[1] = text
    return "\n".join([lines[0], ",".join(row), *lines[2:]]).encode()


def ulog(**changes: Any) -> bytes:
    return as_ulog(replace(circling_log(40.0), **changes), Variant())


def ulog_messages(change: Callable[[int, bytes], bytes]) -> bytes:
    """A ULog whose payloads went through `change(kind, payload)`."""
    data = ulog()
    return joined(data, [(kind, change(kind, payload)) for kind, payload in messages(data)])


def pressures(value: float) -> DecodedLog:
    log = circling_log(40.0)
    assert log.probe is not None
    readings = np.full(log.probe.time_s.size, value)
    return replace(log, probe=replace(log.probe, impact_pressure_pa=readings))


def stamps(change: Callable[[int], int]) -> bytes:
    def changed(kind: int, payload: bytes) -> bytes:
        if kind != DATA:
            return payload
        stamp = change(int.from_bytes(payload[2:10], "little")) % (1 << 64)
        return payload[:2] + struct.pack("<Q", stamp) + payload[10:]

    return ulog_messages(changed)


def many_subscriptions() -> bytes:
    data = ulog()
    parts = list(messages(data))
    (first, *_) = [payload for kind, payload in parts if kind == SUBSCRIPTION]
    added = [(SUBSCRIPTION, struct.pack("<BH", n % 256, 100 + n) + first[3:]) for n in range(5000)]
    return joined(data, [*parts, *added])


def wide_format(fields: bytes) -> bytes:
    """A ULog whose formats have these fields, too."""
    return ulog_messages(lambda kind, payload: payload + fields if kind == ord("F") else payload)


def windows(count: int) -> list[dict[str, float]]:
    return [{"start_s": float(n), "end_s": n + 0.5} for n in range(count)]


def form(log: bytes, settings: object) -> bytes:
    return multipart(log, json.dumps(settings).encode())


def bomb(size: int, times: int = 1) -> bytes:
    """Gzip of a column of zeros that decodes to more than `size` bytes, packed so many times over."""
    data = b'{"probe":{"time_s":[' + b"0," * (size // 2)
    for _ in range(times):
        data = gzip.compress(data, 9, mtime=0)
    return data


def kept_none(stream: str) -> dict[str, list[float]]:
    return {name: [] for name in made.batch()[stream]}


def first_of(stream: str) -> dict[str, list[float]]:
    return {name: values[:1] for name, values in made.batch()[stream].items()}


def bad_utf8() -> bytes:
    return cell("12").replace(b",12,", b",1\xff2,", 1)


def one_each() -> bytes:
    data = ulog()
    seen: set[bytes] = set()
    parts = [
        (kind, payload)
        for kind, payload in messages(data)
        if kind != DATA or (payload[:2] not in seen and not seen.add(payload[:2]))  # type: ignore[func-returns-value]
    ]
    return joined(data, parts)


def self_nested() -> bytes:
    def nested(kind: int, payload: bytes) -> bytes:
        return payload + payload.partition(b":")[0] + b" a;" if kind == ord("F") else payload

    return ulog_messages(nested)


GZIP = {"Content-Encoding": "gzip"}

# --- the table --------------------------------------------------------------------------------------------------------

ROWS: dict[str, Row] = {
    # gzip
    "gzip bomb": Row(413, lambda: bomb(64 * MIB), JSON, "decodes to more", GZIP),
    "gzip within gzip": Row(400, lambda: bomb(MIB, 2), RAW, "no log", GZIP),
    "gzip that is cut": Row(400, lambda: gzip.compress(batch())[:-9], JSON, "cut short", GZIP),
    "gzip header alone": Row(400, lambda: gzip.compress(b"")[:10], JSON, "cut short", GZIP),
    "gzip of nothing": Row(400, lambda: gzip.compress(b""), RAW, "empty", GZIP),
    "gzip with a wrong checksum": Row(400, lambda: gzip.compress(batch())[:-8] + bytes(8), JSON, "damaged", GZIP),
    "gzip of two members": Row(
        200, lambda: gzip.compress(batch()[:999]) + gzip.compress(batch()[999:]), JSON, headers=GZIP
    ),
    "gzip of five thousand members": Row(400, lambda: gzip.compress(b" ") * 5000, JSON, "members", GZIP),
    "gzip that is none": Row(400, batch, JSON, "not gzip", GZIP),
    "gzip that nobody announced": Row(400, lambda: gzip.compress(batch()), RAW, "no log"),
    # nothing
    "empty body": Row(400, lambda: b"", RAW, "empty"),
    "blanks alone": Row(400, lambda: b" \n\t\r\n" * 100, CSV, "empty"),
    "zeros alone": Row(400, lambda: bytes(100_000), RAW, "no log"),
    "a form with an empty log": Row(400, lambda: multipart(b""), FORM, "empty"),
    # JSON as text
    "deep arrays": Row(422, lambda: token(b"[" * 100_000), JSON, "got `array`"),
    "deep objects in the settings": Row(
        400, lambda: batch()[:-1] + b',"settings":' + b'{"a":' * 50_000 + b"1" + b"}" * 50_001, JSON, "nested"
    ),
    "a NaN token": Row(400, lambda: token(b"NaN"), JSON, "cannot be read"),
    "an Infinity token": Row(400, lambda: token(b"-Infinity"), JSON, "cannot be read"),
    "an integer of five thousand digits": Row(422, lambda: token(b"9" * 5000), JSON, "impact_pressure_pa"),
    "a number beyond floats": Row(422, lambda: token(b"1e400"), JSON, "impact_pressure_pa"),
    "a fraction of five thousand digits": Row(422, lambda: token(b"0." + b"3" * 5000), JSON, "has 451 values"),
    "a lone surrogate": Row(400, lambda: batch(start_utc="\ud800"), JSON, "cannot be read"),
    "bytes that are no UTF-8": Row(400, lambda: batch().replace(b"2026", b"\xff\xfe\xff\xfe"), JSON, "cannot be read"),
    "a byte-order mark": Row(200, lambda: b"\xef\xbb\xbf" + batch(), JSON),
    "UTF-16": Row(400, lambda: batch().decode().encode("utf-16"), JSON, ""),
    "a name given twice": Row(400, lambda: batch()[:-1] + b',"gps":null}', JSON, "repeated"),
    "two documents": Row(400, lambda: batch() * 2, JSON, "cannot be read"),
    "a batch that is cut": Row(400, lambda: batch()[:-300], JSON, "cannot be read"),
    "a batch over its limit": Row(413, lambda: b"{" + b" " * (64 * MIB), JSON, "larger than"),
    # batches that are wrong
    "an array for the batch": Row(422, lambda: b"[]", JSON, "Expected"),
    "no stream at all": Row(422, lambda: b"{}", JSON, "/gps"),
    "types swapped": Row(422, lambda: batch(probe=[], gps={"time_s": {}}), JSON, "/probe"),
    "numbers as text": Row(422, lambda: probe(impact_pressure_pa=["1"] * 450), JSON, "/probe/impact_pressure_pa"),
    "true for a number": Row(422, lambda: probe(impact_pressure_pa=[True] * 450), JSON, "/probe/impact_pressure_pa"),
    "a column too short": Row(422, lambda: probe(impact_pressure_pa=[1.0]), JSON, "time_s has 450"),
    "a column missing": Row(422, lambda: gps(velocity_east_mps=None), JSON, "/gps/velocity_east_mps"),
    "times unsorted": Row(422, lambda: probe_times(lambda t: t[::-1]), JSON, "stands before"),
    "times repeated": Row(422, lambda: probe_times(lambda t: [t[0], *t[:-1]]), JSON, "repeats"),
    "times all the same": Row(422, lambda: probe_times(lambda t: [5.0] * len(t)), JSON, "repeats"),
    "times in microseconds": Row(422, lambda: probe_times(lambda t: [1e6 * s for s in t]), JSON, "spans"),
    "a time of 1e300": Row(422, lambda: probe_times(lambda t: [*t[:-1], 1e300]), JSON, "beyond"),
    "a time of null": Row(422, lambda: probe(time_s=[None] * 450), JSON, "/probe/time_s"),
    "a time far from the rest": Row(422, lambda: probe_times(lambda t: [*t[:-1], 1e10]), JSON, "spans"),
    "a pressure of 1e308 Pa": Row(422, lambda: probe(impact_pressure_pa=[1e308] * 450), JSON, "impossible"),
    "a pressure of -1e308 Pa": Row(422, lambda: probe(impact_pressure_pa=[-1e308] * 450), JSON, "impossible"),
    "a velocity of light": Row(422, lambda: gps(velocity_north_mps=[3e8] * 450), JSON, "impossible"),
    "an instant that is none": Row(422, lambda: batch(start_utc="yesterday"), JSON, "/start_utc"),
    "an instant out of the calendar": Row(
        422, lambda: batch(start_utc="0001-01-01T00:00:00+14:00"), JSON, "/start_utc"
    ),
    # batches that hold nothing
    "streams without samples": Row(
        200, lambda: batch(**{name: kept_none(name) for name in ("probe", "gps")}), JSON, "no_probe"
    ),
    "a probe without samples": Row(200, lambda: kept("probe", 0), JSON, "no_probe"),
    "a GPS without samples": Row(200, lambda: kept("gps", 0), JSON, "no_gps"),
    "one sample of the probe": Row(200, lambda: kept("probe", 1), JSON, "too_few_samples"),
    "one sample of the GPS": Row(200, lambda: kept("gps", 1), JSON, ""),
    "one sample of both": Row(200, lambda: batch(**{n: first_of(n) for n in ("probe", "gps")}), JSON, ""),
    "pressures all null": Row(200, lambda: nulls("probe", "impact_pressure_pa"), JSON, ""),
    "velocities all null": Row(200, lambda: nulls("gps", "velocity_north_mps", "velocity_east_mps"), JSON, "no_fix"),
    "altitudes all null": Row(200, lambda: nulls("gps", "altitude_m"), JSON, ""),
    "probe and GPS of different days": Row(
        200, lambda: probe_times(lambda t: [s + 1e6 for s in t]), JSON, "no_overlap"
    ),
    "pressures all zero": Row(200, lambda: probe(impact_pressure_pa=[0.0] * 450), JSON, ""),
    "pressures at the limit": Row(200, lambda: probe(impact_pressure_pa=[2e5] * 450), JSON, ""),
    "pressures below zero": Row(200, lambda: probe(impact_pressure_pa=[-2e5] * 450), JSON, ""),
    # settings
    "a hundred thousand loiters": Row(413, lambda: batch(settings={"loiters": windows(100_000)}), JSON, "settings"),
    "a hundred thousand loiters beside": Row(
        413, lambda: form(batch(), {"loiters": windows(100_000)}), FORM, "settings"
    ),
    "ten thousand loiters": Row(422, lambda: batch(settings={"loiters": windows(10_000)}), JSON, "at most 1000"),
    "a thousand loiters": Row(200, lambda: batch(settings={"loiters": windows(1000)}), JSON, ""),
    "loiters that end before they begin": Row(
        422, lambda: batch(settings={"loiters": [{"start_s": 5, "end_s": 1}]}), JSON, "/settings/loiters/0/end_s"
    ),
    "loiters a thousandfold wrong": Row(
        422, lambda: batch(settings={"loiters": [{"start_s": 5, "end_s": 1}] * 1000}), JSON, "first 100 of 1000"
    ),
    "loiters outside the flight": Row(200, lambda: batch(settings={"loiters": [{"start_s": 1e6, "end_s": 2e6}]}), JSON),
    "a name of a million characters": Row(413, lambda: batch(settings={"x" * 1_100_000: 1}), JSON, "settings"),
    "a name of thousands of characters": Row(422, lambda: batch(settings={"x" * 50_000: 1}), JSON, "not known"),
    "a configuration's name too long": Row(
        422, lambda: form(batch(), {"aircraft": {"configurations": [{"name": "x" * 9000}]}}), FORM, "1 to 64 characters"
    ),
    "settings with a number beyond floats": Row(
        422, lambda: batch(settings={"probe": {"zero_offset_pa": 10**400}}), JSON, "zero_offset_pa"
    ),
    "settings with a scale of nothing": Row(
        422, lambda: batch(settings={"probe": {"applied_speed_scale": 0}}), JSON, "applied_speed_scale"
    ),
    "settings at the smallest floats": Row(
        200,
        lambda: batch(settings={"probe": {"applied_speed_scale": 5e-324, "zero_offset_uncertainty_pa": 5e-324}}),
        JSON,
    ),
    "settings that are no JSON": Row(400, lambda: multipart(batch(), b"{'a': 1}"), FORM, "not JSON"),
    "settings that are no UTF-8": Row(400, lambda: multipart(batch(), b'{"\xff": 1}'), FORM, "not JSON"),
    "settings that are a number": Row(422, lambda: multipart(batch(), b"5"), FORM, "settings are wrong"),
    # forms
    "another boundary": Row(400, lambda: multipart(batch(), boundary="other"), FORM, "broken or cut short"),
    "no boundary": Row(400, lambda: multipart(batch()), "multipart/form-data", "no boundary"),
    "two parts log": Row(422, lambda: multipart(batch())[:-10] + multipart(batch()), FORM, "twice"),
    "a part of another name": Row(422, lambda: multipart(batch()).replace(b'"log"', b'"lag"'), FORM, "/lag"),
    "a part without a name": Row(400, lambda: multipart(batch()).replace(b' name="log";', b""), FORM, "no name"),
    "endless headers of a part": Row(
        413,
        lambda: multipart(batch()).replace(b"\r\n\r\n", b"\r\nX-A: " + b"a" * 99_999 + b"\r\n\r\n", 1),
        FORM,
        "headers",
    ),
    "a form that is cut": Row(400, lambda: multipart(batch())[:-20], FORM, "broken or cut short"),
    # media types
    "an unknown media type": Row(415, batch, "text/plain", "text/plain"),
    "a media type that is none": Row(415, batch, "json", "json"),
    "a table that calls itself JSON": Row(400, lambda: table().encode(), JSON, "not a JSON object"),
    "a batch that calls itself a table": Row(200, batch, CSV),
    # tables
    "NUL bytes in a table": Row(400, lambda: cell("1\x002"), CSV, "no log"),
    "a NUL byte far down a table": Row(
        422, lambda: table().encode() + b"1e3,\0" + b"," * 17 + b"\n", CSV, "no finite number"
    ),
    "a table with 100000 columns": Row(
        413, lambda: ",".join(["time_s", *(f"c{n}" for n in range(100_000))]).encode(), CSV, "longer than"
    ),
    "a table with 2000 columns": Row(413, lambda: b"time_s" + b",a" * 2000 + b"\n", CSV, "2001 columns"),
    "one line of 50 MB": Row(413, lambda: b"1" * (50 * MIB), CSV, "longer than"),
    "a line of 50 MB below the header": Row(413, lambda: table().encode() + b"1" * (50 * MIB), CSV, "longer than"),
    "a cell of NaN": Row(200, lambda: cell("NaN"), CSV),
    "a cell of infinity": Row(422, lambda: cell("inf"), CSV, "no finite number"),
    "a cell of 1e400": Row(422, lambda: cell("1e400"), CSV, "no finite number"),
    "a cell of 1e308": Row(422, lambda: cell("1e308"), CSV, "impossible"),
    "a cell of words": Row(422, lambda: cell("=HYPERLINK(1)"), CSV, "no finite number"),
    "a quote that never ends": Row(200, lambda: cell('"1'), CSV),
    "a quote that spans lines": Row(422, lambda: cell('"1\n2'), CSV, "cells"),
    "a header alone": Row(200, lambda: table().split("\n")[0].encode(), CSV, "no_probe"),
    "a header without a known name": Row(400, lambda: b"a,b\n1,2\n", CSV, ""),
    "no header": Row(400, lambda: b"1,2\n3,4\n", CSV, "no header"),
    "a column twice": Row(422, lambda: b"time_s,time_s\n1,2\n", CSV, ""),
    "rows of a table unsorted": Row(
        422, lambda: "\n".join([*table().split("\n")[:1], *table().split("\n")[:0:-1]]).encode(), CSV, "stands before"
    ),
    "rows of a table twice": Row(422, lambda: (table() + table().partition("\n")[2]).encode(), CSV, "stands before"),
    "a table in UTF-16": Row(200, lambda: table().encode("utf-16"), CSV),
    "a table in UTF-16 that is cut within a letter": Row(
        422, lambda: table().encode("utf-16")[:-3], CSV, "no finite number"
    ),
    "a table in UTF-32": Row(400, lambda: table().encode("utf-32"), CSV, ""),
    "a table that is no UTF-8": Row(422, bad_utf8, CSV, ""),
    "a million blank lines": Row(400, lambda: b"\n" * 1_000_000, CSV, "empty"),
    # ULog
    "a ULog's header alone": Row(200, lambda: HEADER + bytes(8), RAW, "no_probe"),
    "a ULog's magic alone": Row(400, lambda: HEADER[:4], RAW, "cannot be decoded"),
    "a ULog of definitions alone": Row(200, lambda: ulog(probe=None, gps=None), RAW, "no_probe"),
    "a ULog with one sample each": Row(200, one_each, RAW, ""),
    "a ULog of one endless message": Row(200, lambda: HEADER + bytes(8) + b"\xff\xffD" + bytes(99), RAW, "no_probe"),
    "a ULog of zeros": Row(200, lambda: HEADER + bytes(8) + bytes(300_000), RAW, "no_probe"),
    "a ULog with an array of a billion": Row(200, lambda: wide_format(b"float[1000000000] a;"), RAW, "no_probe"),
    "a ULog with an array of 60000": Row(400, lambda: wide_format(b"float[60000] a;"), RAW, "more than 2000 fields"),
    "a ULog whose formats hold themselves": Row(400, self_nested, RAW, ""),
    "a ULog with 5000 sensors": Row(400, many_subscriptions, RAW, "more than 200"),
    "a ULog with all times zero": Row(200, lambda: stamps(lambda _t: 0), RAW, ""),
    "a ULog with all times at the end": Row(200, lambda: stamps(lambda _t: -1), RAW, ""),
    "a ULog with times backward": Row(200, lambda: stamps(lambda t: 10**9 - t), RAW, "time_steps_back"),
    "a ULog with the largest pressures": Row(200, lambda: as_ulog(pressures(3e38), Variant()), RAW, ""),
    "a ULog without one number": Row(200, lambda: as_ulog(pressures(np.nan), Variant()), RAW, ""),
}


@pytest.mark.parametrize("name", ROWS)
def test_it_gets_its_answer(client: FlaskClient, name: str) -> None:
    row = ROWS[name]
    answer = client.post(URL, data=row.body(), headers={"Content-Type": row.media_type, **row.headers})
    document = judge(answer)
    assert answer.status_code == row.status
    assert row.says in said(document)


def said(document: dict[str, Any]) -> str:
    """The words of a problem, or the verdict's reasons."""
    if "calibration" in document:
        return " ".join(reason["code"] for reason in document["calibration"]["reasons"])
    return f"{document['detail']} {document.get('errors', '')}"

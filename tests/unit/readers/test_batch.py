"""JSON batches: what is right is taken as it is, what is wrong is refused with its place."""

import json
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from service.domain.codes import LogFormat
from service.domain.errors import InputTooLarge, UnreadableInput, WrongValues
from service.readers.limits import ReadingLimits
from service.readers.reading import ReadResult
from service.readers.registry import read_log
from tests.unit.readers.example import as_batch, batch_bytes, circling_log

Batch = dict[str, Any]


def read(tmp_path: Path, body: bytes | Batch, **limits: int) -> ReadResult:
    path = tmp_path / "batch.bin"
    path.write_bytes(body if isinstance(body, bytes) else json.dumps(body).encode())
    return read_log(path, sha256="s", limits=ReadingLimits(**limits))


def small() -> Batch:
    return {
        "probe": {"time_s": [0.0, 0.1, 0.2], "impact_pressure_pa": [100.0, None, 102.0]},
        "gps": {"time_s": [0, 1], "velocity_north_mps": [10, 11], "velocity_east_mps": [-1, None]},
    }


def test_all_columns_of_the_contract_are_taken_as_given(tmp_path: Path) -> None:
    expected = circling_log()
    log = read(tmp_path, batch_bytes(expected)).log
    assert log.format is LogFormat.BATCH
    assert log.start_utc == expected.start_utc
    for stream, columns in as_batch(expected).items():
        for column, values in columns.items() if stream != "start_utc" else ():
            np.testing.assert_array_equal(getattr(getattr(log, stream), column), np.array(values, dtype=float))
    assert log.probe is not None
    assert log.probe.compensated
    assert (log.truncated, log.time_steps_back, log.ground_contact) == (False, 0, None)


def test_times_are_not_shifted_and_null_is_a_gap(tmp_path: Path) -> None:
    batch = small()
    batch["probe"]["time_s"] = [1000.5, 1000.6, 1000.7]
    log = read(tmp_path, batch).log
    assert log.probe is not None
    assert log.probe.time_s.tolist() == [1000.5, 1000.6, 1000.7]
    assert np.isnan(log.probe.impact_pressure_pa).tolist() == [False, True, False]
    assert log.gps is not None
    # half a velocity is none
    assert np.isnan(log.gps.velocity_north_mps).tolist() == [False, True]


def test_speed_and_track_make_components(tmp_path: Path) -> None:
    batch = small()
    batch["gps"] = {"time_s": [0, 1, 2, 3], "ground_speed_mps": [10, 10, 10, None], "track_deg": [0, 90, -135, 0]}
    gps = read(tmp_path, batch).log.gps
    assert gps is not None
    root = 10 * np.sqrt(0.5)
    np.testing.assert_allclose(gps.velocity_north_mps, [10, 0, -root, np.nan], atol=1e-12)
    np.testing.assert_allclose(gps.velocity_east_mps, [0, 10, -root, np.nan], atol=1e-12)
    assert gps.velocity_down_mps is None
    assert "track" in gps.source


def test_samples_without_a_fix_are_nan(tmp_path: Path) -> None:
    batch = small()
    batch["gps"] = {
        "time_s": [0, 1, 2, 3, 4],
        "velocity_north_mps": [1, 2, 3, 4, 5],
        "velocity_east_mps": [1, 2, 3, 4, 5],
        "velocity_down_mps": [1, 2, 3, 4, 5],
        "fix": [0, 2, 3, None, 4],
    }
    gps = read(tmp_path, batch).log.gps
    assert gps is not None
    assert gps.velocity_down_mps is not None
    np.testing.assert_array_equal(gps.velocity_north_mps, [np.nan, np.nan, 3, 4, 5])
    np.testing.assert_array_equal(gps.velocity_down_mps, [np.nan, np.nan, 3, 4, 5])


def test_a_little_more_than_saturated_is_saturated(tmp_path: Path) -> None:
    air = {"time_s": [0, 1], "air_temperature_k": [280, 281], "relative_humidity": [0.5, 1.03]}
    temperature = read(tmp_path, small() | {"temperature": air}).log.temperature
    assert temperature is not None
    assert temperature.relative_humidity is not None
    assert temperature.relative_humidity.tolist() == [0.5, 1.0]


def test_settings_pass_through_as_they_are(tmp_path: Path) -> None:
    settings = {"aircraft": {"mass_kg": 6.4, "configurations": [{"name": 'a "b": c'}]}, "unheard_of": [1, None, True]}
    assert read(tmp_path, small() | {"settings": settings}).settings == settings
    assert read(tmp_path, small()).settings is None
    assert read(tmp_path, small() | {"settings": None}).settings is None


def test_null_streams_and_columns_are_absent_ones(tmp_path: Path) -> None:
    batch = small() | {"static": None, "attitude": None, "start_utc": None}
    batch["gps"]["altitude_m"] = None
    log = read(tmp_path, batch).log
    assert log.static is None
    assert log.gps is not None
    assert log.gps.altitude_m is None


def test_streams_without_samples_are_none(tmp_path: Path) -> None:
    empty = {
        "probe": {"time_s": [], "impact_pressure_pa": []},
        "gps": {"time_s": [], "ground_speed_mps": [], "track_deg": []},
        "static": {"time_s": [], "static_pressure_pa": []},
    }
    log = read(tmp_path, empty).log
    assert (log.probe, log.gps, log.static) == (None, None, None)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("2026-05-04T09:12:00Z", datetime(2026, 5, 4, 9, 12, tzinfo=UTC)),
        ("2026-05-04T09:12:00.25+02:00", datetime(2026, 5, 4, 7, 12, 0, 250_000, tzinfo=UTC)),
        ("2026-05-04T09:12:00", datetime(2026, 5, 4, 9, 12, tzinfo=UTC)),
    ],
)
def test_start_is_utc(tmp_path: Path, text: str, expected: datetime) -> None:
    assert read(tmp_path, small() | {"start_utc": text}).log.start_utc == expected


def changed(change: Callable[[Batch], object]) -> Batch:
    batch = small()
    change(batch)
    return batch


@pytest.mark.parametrize(
    ("change", "pointers"),
    [
        (lambda b: b.pop("probe"), {"/probe"}),
        (lambda b: b.pop("gps"), {"/gps"}),
        (lambda b: b.clear(), {"/probe", "/gps"}),
        (lambda b: b.update(probe=None), {"/probe"}),
        (lambda b: b["probe"].pop("time_s"), {"/probe/time_s"}),
        (lambda b: b["probe"].pop("impact_pressure_pa"), {"/probe/impact_pressure_pa", "/probe"}),
        (lambda b: b["gps"].pop("velocity_east_mps"), {"/gps/velocity_east_mps"}),
        (lambda b: b.update(gps={"time_s": [0], "altitude_m": [5]}), {"/gps"}),
        (lambda b: b.update(gps={"time_s": [0], "track_deg": [5]}), {"/gps/ground_speed_mps"}),
        (lambda b: b["probe"]["impact_pressure_pa"].pop(), {"/probe/impact_pressure_pa"}),
        (lambda b: b["probe"]["time_s"].pop(), {"/probe/impact_pressure_pa"}),
        (lambda b: b["probe"].update(time_s=[0, 0.2, 0.1]), {"/probe/time_s"}),
        (lambda b: b["probe"].update(time_s=[0, 0.1, 0.1]), {"/probe/time_s"}),
        (lambda b: b["probe"].update(time_s=[0, None, 0.1]), {"/probe/time_s"}),
        (lambda b: b["probe"].update(time_s=[0, 1, 1e300]), {"/probe/time_s"}),
        (lambda b: b["probe"].update(time_s=[0, 1, 1e7]), {"/probe/time_s"}),
        (lambda b: b["gps"].update(time_s=[1, 0]), {"/gps/time_s"}),
        (lambda b: b["probe"].update(impact_pressure_pa=[1, 2, 3e5]), {"/probe/impact_pressure_pa"}),
        (lambda b: b["gps"].update(velocity_north_mps=[1, 501]), {"/gps/velocity_north_mps"}),
        (lambda b: b["gps"].update(latitude_deg=[1, 91]), {"/gps/latitude_deg"}),
        (lambda b: b.update(static={"time_s": [0], "static_pressure_pa": [0]}), {"/static/static_pressure_pa"}),
        (lambda b: b.update(static={"time_s": [0], "static_pressure_pa": [1013]}), {"/static/static_pressure_pa"}),
        (
            lambda b: b.update(temperature={"time_s": [0], "air_temperature_k": [15]}),
            {"/temperature/air_temperature_k"},
        ),
        (
            lambda b: b.update(temperature={"time_s": [0], "relative_humidity": [0.5]}),
            {"/temperature/air_temperature_k"},
        ),
        (lambda b: b.update(attitude={"time_s": [0]}), {"/attitude"}),
        (lambda b: b.update(load_factor={"time_s": [0]}), {"/load_factor/load_factor", "/load_factor"}),
        (lambda b: b.update(unheard_of={}), {"/unheard_of"}),
        (lambda b: b["probe"].update({"a/b~c": [1]}), {"/probe/a~1b~0c"}),
        (lambda b: b["probe"].update(time_s=["0", 1, 2]), {"/probe/time_s/0"}),
        (lambda b: b["probe"].update(time_s=[0, True, 2]), {"/probe/time_s/1"}),
        (lambda b: b["probe"].update(time_s=[0, 1, [2]]), {"/probe/time_s/2"}),
        (lambda b: b["probe"].update(time_s={"a": 1}), {"/probe/time_s"}),
        (lambda b: b["probe"].update(time_s=3.0), {"/probe/time_s"}),
        (lambda b: b["probe"].update(time_s=[0, 1, 10**400]), {"/probe/time_s/2"}),
        (lambda b: b["probe"].update(time_s=[0, 1, 10**30]), {"/probe/time_s"}),
        (lambda b: b.update(probe=[1]), {"/probe"}),
        (lambda b: b.update(settings=[1]), {"/settings"}),
        (lambda b: b.update(start_utc=5), {"/start_utc"}),
        (lambda b: b.update(start_utc="yesterday"), {"/start_utc"}),
        (lambda b: b.update(start_utc="0001-01-01T00:00:00+14:00"), {"/start_utc"}),
    ],
)
def test_wrong_values_are_named_by_pointer(
    tmp_path: Path, change: Callable[[Batch], object], pointers: set[str]
) -> None:
    with pytest.raises(WrongValues) as caught:
        read(tmp_path, changed(change))
    assert set(caught.value.errors) == pointers
    assert all(caught.value.errors.values())


def test_all_that_is_wrong_is_told_at_once_with_its_index(tmp_path: Path) -> None:
    batch = {
        "probe": {"time_s": [0, 1, 0.5], "impact_pressure_pa": [1, 9e9, 9e9]},
        "gps": {"time_s": [0], "velocity_north_mps": [1, 2], "velocity_east_mps": [1]},
    }
    with pytest.raises(WrongValues) as caught:
        read(tmp_path, batch)
    errors = caught.value.errors
    assert set(errors) == {"/probe/time_s", "/probe/impact_pressure_pa", "/gps/velocity_north_mps"}
    assert "index 2" in errors["/probe/time_s"]
    assert "index 1" in errors["/probe/impact_pressure_pa"]
    assert "2 values" in errors["/gps/velocity_north_mps"]


@pytest.mark.parametrize(
    "body",
    [
        b'{"probe": {"time_s": [0, NaN]}}',
        b'{"probe": {"time_s": [0, Infinity]}}',
        b'{"settings": {"a": NaN}}',
        b'{"probe": ',
        b"{} x",
        b"{'probe': 1}",
        b'{"settings": {"a": 1,}}',
        b'{"start_utc": "\xff"}',
        b'{"start_utc": "\\ud800"}',
        b'{"settings": {"a": "\\udc00"}}',
        b'{"settings": ' + b"[" * 100_000 + b"]" * 100_000 + b"}",
        b'{"settings": ' + b'{"a":' * 100_000 + b"1" + b"}" * 100_000 + b"}",
        b'{"settings": {"a": ' + b"[" * 100 + b"]" * 100 + b"}}",
        b'{"probe": {"time_s": [0], "time_s": [1]}}',
        b'{"probe": null, "probe": null}',
        b'{"settings": {"a": {"b": 1, "b": 2}}}',
        "{}".encode("utf-16"),
        "{}".encode("utf-16-be"),
    ],
    ids=lambda body: repr(body[:40]),
)
def test_what_is_no_json_is_unreadable(tmp_path: Path, body: bytes) -> None:
    with pytest.raises(UnreadableInput):
        read(tmp_path, body)


def test_an_endless_number_is_refused(tmp_path: Path) -> None:
    with pytest.raises((UnreadableInput, WrongValues)):
        read(tmp_path, b'{"settings": {"a": ' + b"9" * 5000 + b"}}")


def test_an_array_is_no_batch(tmp_path: Path) -> None:
    with pytest.raises(WrongValues) as caught:
        read(tmp_path, b" [1, 2]")
    assert set(caught.value.errors) == {""}


def test_a_mark_of_utf8_is_allowed(tmp_path: Path) -> None:
    assert read(tmp_path, b"\xef\xbb\xbf" + json.dumps(small()).encode()).log.probe is not None


def test_limits(tmp_path: Path) -> None:
    with pytest.raises(InputTooLarge, match="100 bytes"):
        read(tmp_path, small(), batch_bytes=100)
    with pytest.raises(InputTooLarge, match="limit is 2"):
        read(tmp_path, small(), samples_per_stream=2)


def test_a_name_as_long_as_the_body_is_not_repeated(tmp_path: Path) -> None:
    with pytest.raises(WrongValues) as caught:
        read(tmp_path, {"x" * 100_000: 1})
    assert len(str(caught.value)) < 500

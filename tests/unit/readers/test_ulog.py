"""Log files of every generation give the flight that was written into them."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from service.domain.errors import InputTooLarge
from service.domain.log import DecodedLog
from service.readers import ulog_fields as table
from service.readers.limits import ReadingLimits
from service.readers.registry import read_log
from service.readers.ulog_fields import TIME
from tests.synthetic.ulog_file import (
    HEADER,
    Stream,
    Variant,
    flight_streams,
    gps_values,
    message,
    stream,
    write_container,
    write_ulog,
)
from tests.unit.readers.example import START_UTC, circling_log

FLIGHT = circling_log()


def read(path: Path) -> DecodedLog:
    return read_log(path, sha256="0" * 64).log


def written(tmp_path: Path, log: DecodedLog = FLIGHT, **variant: object) -> DecodedLog:
    path = tmp_path / "flight.bin"
    write_ulog(path, log, Variant(**variant))  # type: ignore[arg-type]
    return read(path)


def from_streams(tmp_path: Path, streams: list[Stream]) -> DecodedLog:
    path = tmp_path / "flight.bin"
    write_container(path, streams)
    return read(path)


def assert_same_samples(found: object, expected: object, *names: str, atol: float = 1e-4, rtol: float = 1e-6) -> None:
    for name in names:
        np.testing.assert_allclose(getattr(found, name), getattr(expected, name), atol=atol, rtol=rtol, err_msg=name)


@pytest.mark.parametrize(
    "variant",
    [
        {},
        {"generation": "old"},
        {"sample_times": False},
        {"gps_topic": 1},
        {"gps_topic": 1, "generation": "old"},
        {"static_topic": 1},
        {"static_topic": 1, "hectopascals": True},
        {"acceleration_topic": 1},
        {"tail_sitter": True},
        {"second_probe": "dead"},
        {"second_probe": "live"},
        {"filler_bytes": 50_000},
        {"start_us": 3_000_000_000},
    ],
    ids=str,
)
def test_every_variant_gives_the_flight_that_was_written(tmp_path: Path, variant: dict[str, object]) -> None:
    log = written(tmp_path, **variant)
    assert_same_samples(log.probe, FLIGHT.probe, "time_s", "impact_pressure_pa")
    assert_same_samples(log.static, FLIGHT.static, "time_s", "static_pressure_pa", atol=0.01)
    assert_same_samples(log.temperature, FLIGHT.temperature, "time_s", "air_temperature_k")
    assert_same_samples(log.gps, FLIGHT.gps, "time_s", "velocity_north_mps", "velocity_east_mps", "velocity_down_mps")
    assert_same_samples(log.gps, FLIGHT.gps, "latitude_deg", "longitude_deg", atol=1e-7, rtol=0)
    assert_same_samples(log.gps, FLIGHT.gps, "altitude_m", "speed_uncertainty_mps", atol=1e-3)
    assert_same_samples(log.attitude, FLIGHT.attitude, "time_s", "roll_deg", "pitch_deg", "yaw_deg", atol=2e-3)
    assert_same_samples(log.load_factor, FLIGHT.load_factor, "time_s", "load_factor")
    assert_same_samples(log.ground_contact, FLIGHT.ground_contact, "time_s", "on_ground")
    assert log.start_utc is not None
    assert abs((log.start_utc - START_UTC).total_seconds()) < 1e-5
    assert (log.truncated, log.time_steps_back, log.gaps) == (False, 0, ())


def test_time_zero_is_the_first_sample_that_is_used(tmp_path: Path) -> None:
    assert FLIGHT.static is not None
    late = replace(FLIGHT, static=replace(FLIGHT.static, time_s=FLIGHT.static.time_s - 0.25))
    log = written(tmp_path, late, second_probe="dead")
    assert log.static is not None
    assert log.probe is not None
    assert log.start_utc is not None
    assert log.static.time_s[0] == 0.0
    assert log.probe.time_s[0] == 0.25
    assert (START_UTC - log.start_utc).total_seconds() == pytest.approx(0.25, abs=1e-5)


def test_raw_probe_is_not_taken_for_compensated(tmp_path: Path) -> None:
    log = written(tmp_path)
    assert log.probe is not None
    assert not log.probe.compensated


def test_live_probe_is_chosen_before_a_dead_one_and_the_notes_say_so(tmp_path: Path) -> None:
    log = written(tmp_path, second_probe="dead")
    notes = {note.instance: note for note in log.sensors if note.sensor == "probe"}
    assert (notes[0].dead, notes[0].chosen) == (True, False)
    assert (notes[1].dead, notes[1].chosen) == (False, True)
    assert "constant" in notes[0].reason
    assert "impossible temperature" in notes[0].reason
    assert "only live one" in notes[1].reason
    assert notes[0].samples == 600
    assert (notes[0].start_s, notes[0].end_s) == (0.0, 59.9)
    assert log.probe is not None
    assert log.probe.source == "differential pressure sensor, instance 1 of 2"


def test_of_live_probes_the_one_with_more_samples_is_chosen(tmp_path: Path) -> None:
    notes = {note.instance: note for note in written(tmp_path, second_probe="live").sensors if note.sensor == "probe"}
    assert (notes[0].chosen, notes[1].chosen) == (True, False)
    assert not notes[1].dead
    assert "fewer samples" in notes[1].reason


def test_of_live_gps_sources_the_one_with_more_samples_is_chosen(tmp_path: Path) -> None:
    assert FLIGHT.gps is not None
    values = gps_values(FLIGHT, FLIGHT.gps)
    fewer = {name: column[::2] for name, column in values.items()}
    streams = [
        stream(table.GPS_TOPICS[0], FLIGHT.gps.time_s[::2], fewer, Variant()),
        stream(table.GPS_TOPICS[1], FLIGHT.gps.time_s, values, Variant()),
    ]
    gps = from_streams(tmp_path, streams).gps
    assert gps is not None
    assert gps.time_s.size == 300


def test_a_dead_probe_alone_is_handed_on_for_the_faults_to_name(tmp_path: Path) -> None:
    assert FLIGHT.probe is not None
    flat = replace(FLIGHT, probe=replace(FLIGHT.probe, impact_pressure_pa=np.full(600, 55.0)))
    log = written(tmp_path, flat)
    assert log.probe is not None
    assert [(note.dead, note.chosen) for note in log.sensors if note.sensor == "probe"] == [(True, True)]


def test_load_factor_of_a_tail_sitter_is_along_its_nose_axis(tmp_path: Path) -> None:
    log = written(tmp_path, tail_sitter=True)
    assert log.load_factor is not None
    assert "nose axis" in log.load_factor.source
    usual = written(tmp_path).load_factor
    assert usual is not None
    assert "normal to the wing" in usual.source


def test_air_temperature_is_never_the_circuit_boards(tmp_path: Path) -> None:
    log = written(tmp_path, replace(FLIGHT, temperature=None))
    assert log.temperature is not None
    # the probe's own: 290 to 292 K; the board has 311 to 315 K
    assert 289.9 < log.temperature.air_temperature_k.min() < log.temperature.air_temperature_k.max() < 292.1
    assert log.temperature.standard_uncertainty_k >= 3.0
    without = written(tmp_path, replace(FLIGHT, temperature=None, probe=None))
    assert without.temperature is None
    board = [note for note in without.sensors if note.sensor == "temperature"]
    assert [(note.chosen, note.dead) for note in board] == [(False, False)]
    assert "circuit board" in board[0].reason


def test_a_placeholder_temperature_is_none(tmp_path: Path) -> None:
    assert FLIGHT.temperature is not None
    placeholder = replace(FLIGHT.temperature, air_temperature_k=np.full(60, 288.15))
    log = written(tmp_path, replace(FLIGHT, temperature=placeholder, probe=None))
    assert log.temperature is None
    assert any("placeholder" in note.reason for note in log.sensors)


def test_a_frozen_air_data_gives_way_to_a_live_barometer(tmp_path: Path) -> None:
    assert FLIGHT.static is not None
    time_s, pressure = FLIGHT.static.time_s, FLIGHT.static.static_pressure_pa
    variant = Variant(generation="old")
    streams = [
        stream(table.STATIC_TOPICS[0], time_s, {"static_pressure_pa": np.full(time_s.size, 99_000.0)}, variant),
        stream(table.STATIC_TOPICS[1], time_s, {"static_pressure_pa": pressure / 100.0}, variant, instance=1),
    ]
    static = from_streams(tmp_path, streams).static
    assert static is not None
    assert static.source == "barometer, instance 1"
    np.testing.assert_allclose(static.static_pressure_pa, pressure, atol=0.05)


@pytest.mark.parametrize("mark", ["fix", "horizontal_uncertainty_m", "velocity_valid"])
def test_velocity_without_a_valid_fix_is_nan(tmp_path: Path, mark: str) -> None:
    assert FLIGHT.gps is not None
    values = gps_values(FLIGHT, FLIGHT.gps)
    bad = {"fix": 2.0, "horizontal_uncertainty_m": 1400.0, "velocity_valid": 0.0}[mark]
    values[mark] = np.where(FLIGHT.gps.time_s < 10.0, bad, values[mark])
    gps = from_streams(tmp_path, [stream(table.GPS_TOPICS[0], FLIGHT.gps.time_s, values, Variant())]).gps
    assert gps is not None
    assert gps.time_s.size == 300
    assert gps.latitude_deg is not None
    for column in (gps.velocity_north_mps, gps.velocity_east_mps, gps.velocity_down_mps, gps.latitude_deg):
        assert column is not None
        np.testing.assert_array_equal(np.isnan(column), gps.time_s < 10.0)


def test_an_unstated_position_uncertainty_is_no_reason_to_doubt(tmp_path: Path) -> None:
    assert FLIGHT.gps is not None
    values = gps_values(FLIGHT, FLIGHT.gps) | {"horizontal_uncertainty_m": np.full(300, np.nan)}
    gps = from_streams(tmp_path, [stream(table.GPS_TOPICS[0], FLIGHT.gps.time_s, values, Variant())]).gps
    assert gps is not None
    assert np.isfinite(gps.velocity_north_mps).all()


def test_of_two_gps_sources_the_one_with_more_valid_samples_is_chosen(tmp_path: Path) -> None:
    assert FLIGHT.gps is not None
    blind = gps_values(FLIGHT, FLIGHT.gps) | {"fix": np.zeros(300)}
    seeing = {name: values[::2] for name, values in gps_values(FLIGHT, FLIGHT.gps).items()}
    streams = [
        stream(table.GPS_TOPICS[0], FLIGHT.gps.time_s, blind, Variant()),
        stream(table.GPS_TOPICS[1], FLIGHT.gps.time_s[::2], seeing, Variant()),
    ]
    log = from_streams(tmp_path, streams)
    assert log.gps is not None
    assert log.gps.source == "GPS receiver, instance 0"
    assert [note.dead for note in log.sensors if note.sensor == "gps"] == [True, False]


def test_a_log_without_probe_or_gps_is_readable(tmp_path: Path) -> None:
    log = written(tmp_path, replace(FLIGHT, probe=None, gps=None))
    assert log.probe is None
    assert log.gps is None
    assert log.start_utc is None
    assert log.static is not None


def probe_stream() -> Stream:
    assert FLIGHT.probe is not None
    values = {"impact_pressure_pa": FLIGHT.probe.impact_pressure_pa}
    return stream(table.PROBE_TOPICS[0], FLIGHT.probe.time_s, values, Variant(sample_times=False))


def test_steps_back_in_time_are_sorted_and_counted(tmp_path: Path) -> None:
    whole = probe_stream()
    order = np.arange(600)
    order[100:110], order[110:120] = np.arange(110, 120), np.arange(100, 110)
    order[[300, 301]] = order[[301, 300]]
    shuffled = replace(whole, messages=whole.messages[order], arrival_us=np.arange(600))
    log = from_streams(tmp_path, [shuffled])
    assert FLIGHT.probe is not None
    assert log.probe is not None
    assert log.time_steps_back == 2
    assert_same_samples(log.probe, FLIGHT.probe, "time_s", "impact_pressure_pa")


def test_of_repeated_times_the_first_sample_counts(tmp_path: Path) -> None:
    whole = probe_stream()
    messages = whole.messages[np.repeat(np.arange(600), 2)]
    column = next(name for name in messages.dtype.names or () if name != TIME.name)
    messages[column][1::2] = 9e3
    log = from_streams(tmp_path, [replace(whole, messages=messages, arrival_us=np.arange(1200))])
    assert FLIGHT.probe is not None
    assert log.probe is not None
    assert_same_samples(log.probe, FLIGHT.probe, "time_s", "impact_pressure_pa")
    assert log.time_steps_back == 0


def test_impossible_times_are_left_out_with_a_note(tmp_path: Path) -> None:
    whole = probe_stream()
    messages = whole.messages.copy()
    messages[TIME.name][[3, 50, 51]] = 2**64 - 1, 2**63, 10**16
    log = from_streams(tmp_path, [replace(whole, messages=messages, arrival_us=np.arange(600))])
    assert log.probe is not None
    assert log.probe.time_s.size == 597
    assert log.probe.time_s[-1] == 59.9
    assert "3 samples with impossible times left out" in log.sensors[0].reason


def test_impossible_times_among_steps_back(tmp_path: Path) -> None:
    whole = probe_stream()
    order = np.arange(600)
    order[[300, 301]] = order[[301, 300]]
    messages = whole.messages[order]
    messages[TIME.name][3] = 2**64 - 1
    log = from_streams(tmp_path, [replace(whole, messages=messages, arrival_us=np.arange(600))])
    assert FLIGHT.probe is not None
    assert log.probe is not None
    assert log.time_steps_back == 1
    kept = np.delete(np.arange(600), 3)
    np.testing.assert_allclose(log.probe.impact_pressure_pa, FLIGHT.probe.impact_pressure_pa[kept], rtol=1e-6)


def test_a_sampling_time_of_zero_gives_way_to_the_time_of_writing(tmp_path: Path) -> None:
    whole = flight_streams(FLIGHT, Variant())[0]
    messages = whole.messages.copy()
    messages[table.SAMPLE_TIME.name][10] = 0
    log = from_streams(tmp_path, [replace(whole, messages=messages)])
    assert log.probe is not None
    assert log.probe.time_s[10] == pytest.approx(1.0015)
    assert log.time_steps_back == 0


@pytest.mark.parametrize("state", [0.0, 1.0])
def test_a_notion_of_ground_that_never_changes_is_none(tmp_path: Path, state: float) -> None:
    assert FLIGHT.ground_contact is not None
    constant = replace(FLIGHT.ground_contact, on_ground=np.full(60, bool(state)))
    assert written(tmp_path, replace(FLIGHT, ground_contact=constant)).ground_contact is None
    assert written(tmp_path, replace(FLIGHT, ground_contact=constant, gps=None)).ground_contact is None


def test_a_notion_of_ground_against_the_gps_is_none(tmp_path: Path) -> None:
    assert FLIGHT.ground_contact is not None
    opposite = replace(FLIGHT.ground_contact, on_ground=~FLIGHT.ground_contact.on_ground)
    assert written(tmp_path, replace(FLIGHT, ground_contact=opposite)).ground_contact is None


def test_a_loss_of_data_ends_where_data_go_on(tmp_path: Path) -> None:
    holey = replace(
        FLIGHT,
        **{
            name: replace(samples, **{column: values[keep] for column, values in columns.items()})
            for name in ("probe", "static", "temperature", "gps", "attitude", "load_factor", "ground_contact")
            if (samples := getattr(FLIGHT, name)) is not None
            and (keep := (samples.time_s <= 20.0) | (samples.time_s >= 23.0)).any()
            and (columns := {c: v for c in samples.__slots__ if isinstance(v := getattr(samples, c), np.ndarray)})
        },
    )
    log = written(tmp_path, holey, dropouts=[(20.001, 2_500), (40.001, 60_000)], sample_times=False)
    first, second = log.gaps
    assert (first.start_s, first.end_s) == (20.0, 22.5)
    assert (second.start_s, second.end_s) == (40.0, 40.05)


def test_a_loss_before_the_first_sample_is_none_of_the_logs(tmp_path: Path) -> None:
    path = tmp_path / "flight.bin"
    write_container(path, [probe_stream()], start_us=1_000_000, dropouts=[(2_000_000, 500)])
    assert read(path).gaps == ()


@pytest.mark.parametrize("bytes_left_out", [1, 2, 7, 20])
def test_a_cut_in_a_message_is_said(tmp_path: Path, bytes_left_out: int) -> None:
    path = tmp_path / "flight.bin"
    write_ulog(path, FLIGHT)
    assert not read(path).truncated
    path.write_bytes(path.read_bytes()[:-bytes_left_out])
    cut = read(path)
    assert cut.truncated
    assert cut.probe is not None
    assert cut.probe.time_s.size >= 598


def test_a_header_alone_is_an_empty_log(tmp_path: Path) -> None:
    path = tmp_path / "flight.bin"
    write_ulog(path, FLIGHT)
    path.write_bytes(path.read_bytes()[:16])
    log = read(path)
    assert log.probe is None
    assert log.gps is None
    assert not log.truncated
    assert log.sensors == ()


def test_appended_data_do_no_harm_and_their_loss_is_said(tmp_path: Path) -> None:
    path = tmp_path / "flight.bin"
    appended = b"\x05\x00M\x00\x03abc" * 30
    write_ulog(path, FLIGHT, Variant(appended=appended))
    log = read(path)
    assert log.probe is not None
    assert log.probe.time_s.size == 600
    assert not log.truncated
    content = path.read_bytes()
    for lost in (len(appended), len(appended) + 100):
        path.write_bytes(content[:-lost])
        assert read(path).truncated


def test_data_may_be_appended_in_the_middle_of_a_message(tmp_path: Path) -> None:
    """As after a crash: the last message before it is lost, and nothing of what follows is taken for its rest."""
    path = tmp_path / "flight.bin"
    write_container(path, [probe_stream()], appended=b"")
    content = bytearray(path.read_bytes()[:-4])
    flags = len(HEADER) + 8 + 3
    content[flags + 8] = 1
    content[flags + 16 : flags + 24] = len(content).to_bytes(8, "little")
    path.write_bytes(content + message(b"M", b"\x00\x03abc") * 30)
    log = read(path)
    assert FLIGHT.probe is not None
    assert log.probe is not None
    np.testing.assert_allclose(log.probe.impact_pressure_pa, FLIGHT.probe.impact_pressure_pa[:-1], rtol=1e-6)


def test_impossible_values_are_gaps(tmp_path: Path) -> None:
    assert FLIGHT.probe is not None
    spoiled = FLIGHT.probe.impact_pressure_pa.copy()
    spoiled[[5, 6, 7]] = np.inf, 1e30, np.nan
    log = written(tmp_path, replace(FLIGHT, probe=replace(FLIGHT.probe, impact_pressure_pa=spoiled)))
    assert log.probe is not None
    np.testing.assert_array_equal(np.flatnonzero(np.isnan(log.probe.impact_pressure_pa)), [5, 6, 7])


def test_a_stream_that_is_too_long_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "flight.bin"
    write_ulog(path, FLIGHT)
    with pytest.raises(InputTooLarge, match="limit is 500"):
        read_log(path, sha256="", limits=ReadingLimits(samples_per_stream=500))


def test_sources_and_notes_name_no_topic(tmp_path: Path) -> None:
    log = written(tmp_path, second_probe="dead")
    words = [note.reason for note in log.sensors]
    words += [getattr(log, name).source for name in ("probe", "static", "temperature", "gps", "load_factor")]
    assert not [text for text in words for name in table.TOPIC_NAMES if name in text and "_" in name]

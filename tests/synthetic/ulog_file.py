"""Writes small ULog files, so that a simulated flight can come as the log of a recorder.

Written from the published description of the container: a header of 16 bytes, then messages of size, type and payload.
The names of topics and fields come from the reader's table; none is spelt here.
"""

import re
import struct
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, BinaryIO, Literal

import numpy as np
import numpy.typing as npt
from scipy import constants

from service.domain.arrays import FloatArray
from service.domain.log import AttitudeSamples, DecodedLog, GpsSamples
from service.readers import ulog_fields as table
from service.readers.ulog_fields import SAMPLE_TIME, TIME, LogField, Topic

HEADER = b"ULog\x01\x12\x35\x01"
APPENDED_FLAG = 1
DTYPES: Mapping[str, str] = {
    "float": "<f4",
    "double": "<f8",
    "uint64_t": "<u8",
    "uint32_t": "<u4",
    "int32_t": "<i4",
    "uint8_t": "u1",
    "bool": "u1",
}
MESSAGES_PER_WRITE = 50_000
TRANSPORT_US = 1_500
"""From sampling to writing."""


@dataclass(frozen=True)
class Stream:
    """Messages of one topic and instance: a structured array, whose fields are those of the format."""

    name: str
    instance: int
    kinds: Mapping[str, str]
    """Field -> type in the container, in order; `x[0]`, `x[1]` ... make an array."""
    messages: npt.NDArray[Any]
    arrival_us: npt.NDArray[np.int64] | None = None
    """Order in the file; by default that of the time stamps."""


@dataclass(frozen=True)
class Variant:
    """Which of the ways that such logs are written."""

    generation: Literal["new", "old"] = "new"
    """Of the field names."""
    sample_times: bool = True
    gps_topic: int = 0
    static_topic: int = 0
    hectopascals: bool = False
    acceleration_topic: int = 0
    second_probe: Literal["none", "dead", "live"] = "none"
    tail_sitter: bool = False
    start_us: int = 50_000_000
    """On the recorder's clock at the log's time zero."""
    dropouts: Sequence[tuple[float, int]] = ()
    """Time [s] and claimed length [ms] of each record of lost data."""
    filler_bytes: int = 0
    """Of messages that no reader needs, spread over the log."""
    appended: bytes = b""
    """Put behind the data and announced as appended."""
    kinds: Mapping[str, str] = field(default_factory=dict)
    """Field -> another type than the table's."""


def write_ulog(path: Path, log: DecodedLog, variant: Variant | None = None) -> None:
    """Write a log as a recorder would have.

    Parameters
    ----------
    log : its times are kept, counted from `variant.start_us` on the recorder's clock.
    """
    variant = variant or Variant()
    streams = flight_streams(log, variant)
    if variant.filler_bytes:
        streams += filler_streams(streams, variant.filler_bytes)
    dropouts = [(variant.start_us + round(time_s * 1e6), milliseconds) for time_s, milliseconds in variant.dropouts]
    write_container(path, streams, start_us=variant.start_us, dropouts=dropouts, appended=variant.appended)


def flight_streams(log: DecodedLog, variant: Variant) -> list[Stream]:
    """The streams of a log as topics of the reader's table."""
    streams = []
    if log.probe is not None:
        streams += _probe_streams(log, variant)
    if log.static is not None:
        unit = 100.0 if variant.hectopascals else 1.0
        values = {"static_pressure_pa": log.static.static_pressure_pa / unit}
        values["board_temperature_k"] = np.linspace(311.0, 315.0, log.static.time_s.size)
        streams.append(stream(table.STATIC_TOPICS[variant.static_topic], log.static.time_s, values, variant))
    if log.temperature is not None:
        values = {"air_temperature_k": log.temperature.air_temperature_k}
        streams.append(stream(table.AIR_TEMPERATURE_TOPICS[0], log.temperature.time_s, values, variant))
    if log.gps is not None:
        topic = table.GPS_TOPICS[variant.gps_topic]
        streams.append(stream(topic, log.gps.time_s, gps_values(log, log.gps), variant, with_sample_time=False))
    if log.attitude is not None:
        values = quaternions(log.attitude, variant.tail_sitter)
        streams.append(stream(table.ATTITUDE_TOPICS[0], log.attitude.time_s, values, variant))
    if log.load_factor is not None:
        values = specific_force(log.load_factor.load_factor, variant.tail_sitter)
        topic = table.ACCELERATION_TOPICS[variant.acceleration_topic]
        streams.append(stream(topic, log.load_factor.time_s, values, variant))
    if log.ground_contact is not None:
        values = {"on_ground": log.ground_contact.on_ground.astype(np.float64)}
        streams.append(
            stream(table.GROUND_TOPICS[0], log.ground_contact.time_s, values, variant, with_sample_time=False)
        )
    return streams


def stream(
    topic: Topic,
    time_s: FloatArray,
    values: Mapping[str, FloatArray],
    variant: Variant,
    *,
    instance: int = 0,
    with_sample_time: bool = True,
) -> Stream:
    """Messages of a topic.

    Parameters
    ----------
    time_s : (n,) of sampling, on the log's axis.
    values : quantity of the topic -> (n,) in SI; quantities left out are not in the file.
    """
    fields = {quantity: _field(topic.fields[quantity], variant) for quantity in values}
    sampled_us = variant.start_us + np.round(time_s * 1e6).astype(np.int64)
    timed = with_sample_time and variant.sample_times
    kinds = {TIME.name: TIME.kind} | ({SAMPLE_TIME.name: SAMPLE_TIME.kind} if timed else {})
    kinds |= {log_field.name: variant.kinds.get(log_field.name, log_field.kind) for log_field in fields.values()}
    messages = np.zeros(time_s.size, dtype=[(name, DTYPES[kind]) for name, kind in kinds.items()])
    messages[TIME.name] = sampled_us + (TRANSPORT_US if timed else 0)
    if timed:
        messages[SAMPLE_TIME.name] = sampled_us
    for quantity, log_field in fields.items():
        messages[log_field.name] = _raw(values[quantity], log_field, messages.dtype[log_field.name])
    return Stream(topic.name, instance, kinds, messages)


def _field(variants: tuple[LogField, ...], variant: Variant) -> LogField:
    return variants[0 if variant.generation == "new" else min(1, len(variants) - 1)]


def _raw(values: FloatArray, log_field: LogField, dtype: np.dtype[Any]) -> npt.NDArray[Any]:
    raw = (values - log_field.offset) / log_field.scale
    if dtype.kind == "f":
        return raw.astype(dtype)
    return np.round(np.nan_to_num(raw)).astype(dtype)


def _probe_streams(log: DecodedLog, variant: Variant) -> list[Stream]:
    assert log.probe is not None
    time_s, reading = log.probe.time_s, log.probe.impact_pressure_pa
    warmth = np.linspace(290.0, 292.0, time_s.size)
    topic = table.PROBE_TOPICS[0]
    streams = [stream(topic, time_s, {"impact_pressure_pa": reading, "sensor_temperature_k": warmth}, variant)]
    if variant.second_probe == "live":
        values = {"impact_pressure_pa": reading[::2], "sensor_temperature_k": warmth[::2]}
        streams.append(stream(topic, time_s[::2], values, variant, instance=1))
    if variant.second_probe == "dead":
        # a dead sensor comes first here: the choice must not go by the number
        dead = {
            "impact_pressure_pa": np.full(time_s.size, -34.62),
            "sensor_temperature_k": np.full(time_s.size, -727.0),
        }
        live = streams.pop()
        streams = [
            stream(topic, time_s, dead, variant, instance=0),
            Stream(live.name, 1, live.kinds, live.messages),
        ]
    return streams


def gps_values(log: DecodedLog, gps: GpsSamples) -> dict[str, FloatArray]:
    """What a receiver writes: numbers throughout, and marks where they hold no fix."""
    fix = np.isfinite(gps.velocity_north_mps) & np.isfinite(gps.velocity_east_mps)
    values = {
        "velocity_north_mps": np.nan_to_num(gps.velocity_north_mps),
        "velocity_east_mps": np.nan_to_num(gps.velocity_east_mps),
        "fix": np.where(fix, 3.0, 0.0),
        "horizontal_uncertainty_m": np.where(fix, 1.2, 1400.0),
        "velocity_valid": fix.astype(np.float64),
    }
    optional = ("velocity_down_mps", "latitude_deg", "longitude_deg", "altitude_m", "speed_uncertainty_mps")
    values |= {name: given for name in optional if (given := getattr(gps, name)) is not None}
    if log.start_utc is not None:
        values["utc_s"] = log.start_utc.timestamp() + gps.time_s
    return values


def specific_force(load_factor: FloatArray, tail_sitter: bool) -> dict[str, FloatArray]:
    """Body axes forward, right, down; a tail-sitter in forward flight points its nose axis down. [m/s2]"""
    lift = -constants.g * load_factor
    nothing = np.zeros(load_factor.size)
    parts = (lift, nothing, nothing) if tail_sitter else (nothing, nothing, lift)
    return {f"specific_force_{axis}_mps2": part for axis, part in zip("xyz", parts, strict=True)}


def quaternions(attitude: AttitudeSamples, tail_sitter: bool) -> dict[str, FloatArray]:
    """Body to north, east, down, scalar first, from yaw, pitch and roll in this order."""
    roll, pitch, yaw = (
        np.radians(np.nan_to_num(a)) / 2 for a in (attitude.roll_deg, attitude.pitch_deg, attitude.yaw_deg)
    )
    cr, sr, cp, sp, cy, sy = np.cos(roll), np.sin(roll), np.cos(pitch), np.sin(pitch), np.cos(yaw), np.sin(yaw)
    w, x = cr * cp * cy + sr * sp * sy, sr * cp * cy - cr * sp * sy
    y, z = cr * sp * cy + sr * cp * sy, cr * cp * sy - sr * sp * cy
    if tail_sitter:
        half = np.sqrt(0.5)
        w, x, y, z = (w + y) * half, (x + z) * half, (y - w) * half, (z - x) * half
    return {f"quaternion_{i}": part for i, part in enumerate((w, x, y, z))}


def filler_streams(streams: Sequence[Stream], total_bytes: int) -> list[Stream]:
    """Messages of three sizes that no reader needs, evenly over the span of `streams`."""
    first = min(int(s.messages[TIME.name].min()) for s in streams)
    last = max(int(s.messages[TIME.name].max()) for s in streams)
    fillers = []
    for number, floats in enumerate((6, 16, 40)):
        kinds = {TIME.name: TIME.kind} | {f"filler[{i}]": "float" for i in range(floats)}
        size = 3 + 2 + 8 + 4 * floats
        messages = np.zeros(total_bytes // (3 * size), dtype=[(name, DTYPES[kind]) for name, kind in kinds.items()])
        messages[TIME.name] = np.linspace(first, last, messages.size).astype(np.uint64)
        messages["filler[0]"] = np.arange(messages.size)
        fillers.append(Stream(f"filler_{number}", 0, kinds, messages))
    return fillers


def write_container(
    path: Path,
    streams: Sequence[Stream],
    *,
    start_us: int = 0,
    dropouts: Iterable[tuple[int, int]] = (),
    appended: bytes = b"",
) -> None:
    """Write the container: definitions, subscriptions, and all messages in the order of their arrival.

    Parameters
    ----------
    dropouts : time [us] and claimed length [ms].
    appended : raw messages behind the data.
    """
    with path.open("wb") as file:
        file.write(HEADER + struct.pack("<Q", start_us))
        flags_at = file.tell()
        file.write(_flag_bits(0))
        file.write(message(b"I", bytes([len(b"char[5] made_by")]) + b"char[5] made_by" + b"tests"))
        for name, kinds in {s.name: s.kinds for s in streams}.items():
            file.write(message(b"F", _format(name, kinds)))
        for msg_id, each in enumerate(streams):
            file.write(message(b"A", struct.pack("<BH", each.instance, msg_id) + each.name.encode()))
        _write_interleaved(file, streams, list(dropouts))
        if appended:
            offset = file.tell()
            file.write(appended)
            file.seek(flags_at)
            file.write(_flag_bits(offset))


def message(kind: bytes, payload: bytes) -> bytes:
    """One message of the container."""
    return struct.pack("<H", len(payload)) + kind + payload


def _flag_bits(appended_offset: int) -> bytes:
    incompatible = APPENDED_FLAG if appended_offset else 0
    return message(b"B", bytes(8) + bytes([incompatible]) + bytes(7) + struct.pack("<3Q", appended_offset, 0, 0))


def _format(name: str, kinds: Mapping[str, str]) -> bytes:
    sizes: dict[tuple[str, str], int] = {}
    for field_name, kind in kinds.items():
        base = re.sub(r"\[\d+\]$", "", field_name)
        sizes[base, kind] = sizes.get((base, kind), 0) + (base != field_name)
    parts = [f"{kind}[{size}] {base};" if size else f"{kind} {base};" for (base, kind), size in sizes.items()]
    return f"{name}:{''.join(parts)}".encode()


def _write_interleaved(file: BinaryIO, streams: Sequence[Stream], dropouts: list[tuple[int, int]]) -> None:
    rows = [_rows(msg_id, each.messages) for msg_id, each in enumerate(streams)]
    arrivals = [each.arrival_us if each.arrival_us is not None else _times(each.messages) for each in streams]
    if dropouts:
        records = np.frombuffer(b"".join(message(b"O", struct.pack("<H", length)) for _, length in dropouts), np.uint8)
        rows.append(records.reshape(len(dropouts), -1))
        arrivals.append(np.array([time_us for time_us, _ in dropouts], dtype=np.int64))
    order = np.argsort(np.concatenate(arrivals), kind="stable") if arrivals else np.empty(0, dtype=np.int64)
    owners = np.repeat(np.arange(len(rows)), [len(r) for r in rows])[order]
    within = np.concatenate([np.arange(len(r)) for r in rows] or [np.empty(0, dtype=np.int64)])[order]
    for start in range(0, order.size, MESSAGES_PER_WRITE):
        part = slice(start, start + MESSAGES_PER_WRITE)
        file.write(_joined(rows, owners[part], within[part]))


def _times(messages: npt.NDArray[Any]) -> npt.NDArray[np.int64]:
    # garbage times are kept in their place by those before them
    times: npt.NDArray[np.int64] = messages[TIME.name].astype(np.int64)
    return times


def _rows(msg_id: int, messages: npt.NDArray[Any]) -> npt.NDArray[np.uint8]:
    """(n, message length) bytes of all messages of a stream."""
    payload = 2 + messages.dtype.itemsize
    head = np.frombuffer(struct.pack("<HcH", payload, b"D", msg_id), np.uint8)
    body = np.ascontiguousarray(messages).view(np.uint8).reshape(messages.size, messages.dtype.itemsize)
    return np.concatenate([np.broadcast_to(head, (messages.size, head.size)), body], axis=1)


def _joined(
    rows: Sequence[npt.NDArray[np.uint8]], owners: npt.NDArray[np.int64], within: npt.NDArray[np.int64]
) -> bytes:
    """Messages of different lengths one after another."""
    lengths = np.array([r.shape[1] for r in rows])[owners]
    offsets = np.cumsum(lengths) - lengths
    joined = np.empty(int(lengths.sum()), dtype=np.uint8)
    for owner in np.unique(owners):
        own = owners == owner
        places = offsets[own][:, None] + np.arange(rows[owner].shape[1])
        joined[places] = rows[owner][within[own]]
    return joined.tobytes()

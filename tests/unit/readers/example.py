"""One small flight in every form that the readers take: standing, circling, standing."""

import json
from datetime import UTC, datetime
from typing import Any

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.codes import LogFormat
from service.domain.glossary import STREAMS
from service.domain.log import (
    AttitudeSamples,
    DecodedLog,
    GpsSamples,
    GroundContactSamples,
    LoadFactorSamples,
    ProbeSamples,
    StaticSamples,
    TemperatureSamples,
)

START_UTC = datetime(2026, 5, 4, 9, 12, tzinfo=UTC)


def circling_log(duration_s: float = 60.0, rate_hz: float = 10.0) -> DecodedLog:
    """A log whose streams have rates of their own; the first sample of all is the probe's, at zero."""
    probe_s, static_s, gps_s = (
        times(duration_s, rate_hz),
        times(duration_s, rate_hz / 2),
        times(duration_s, rate_hz / 2),
    )
    slow_s, fast_s = times(duration_s, 1.0), times(duration_s, 2 * rate_hz)
    track = np.radians(12.0 * gps_s)
    speed = 15.0 * airborne(gps_s, duration_s)
    bank = 25.0 * airborne(fast_s, duration_s)
    return DecodedLog(
        format=LogFormat.ULOG,
        sha256="0" * 64,
        start_utc=START_UTC,
        truncated=False,
        time_steps_back=0,
        probe=ProbeSamples(
            probe_s, 2.0 + 138.0 * airborne(probe_s, duration_s) + np.sin(7.0 * probe_s), "probe", False
        ),
        static=StaticSamples(static_s, 99000.0 - 500.0 * np.sin(static_s / 30.0), "static"),
        temperature=TemperatureSamples(slow_s, 284.0 + 0.01 * slow_s, None, "air", 2.0),
        gps=GpsSamples(
            time_s=gps_s,
            velocity_north_mps=speed * np.cos(track) + 0.01 * np.cos(gps_s),
            velocity_east_mps=speed * np.sin(track) + 0.01 * np.sin(gps_s),
            velocity_down_mps=0.3 * np.sin(gps_s),
            latitude_deg=47.0 + 1e-4 * np.sin(track),
            longitude_deg=-8.5 + 1e-4 * np.cos(track),
            altitude_m=400.0 + 10.0 * np.sin(gps_s / 10.0),
            speed_uncertainty_mps=np.full(gps_s.size, 0.3),
            source="gps",
        ),
        attitude=AttitudeSamples(fast_s, bank, 3.0 + np.sin(fast_s), (12.0 * fast_s + 20.0) % 360.0),
        load_factor=LoadFactorSamples(fast_s, 1.0 / np.cos(np.radians(bank)) + 0.05 * np.sin(9.0 * fast_s), "g"),
        ground_contact=GroundContactSamples(slow_s, airborne(slow_s, duration_s) == 0.0),
    )


def times(duration_s: float, rate_hz: float) -> FloatArray:
    """(n,) from zero, whole microseconds. [s]"""
    return np.round(np.arange(int(duration_s * rate_hz)) / rate_hz, 6)


def airborne(time_s: FloatArray, duration_s: float) -> FloatArray:
    """1 in the middle two thirds, else 0."""
    return ((time_s > duration_s / 6) & (time_s < duration_s * 5 / 6)).astype(np.float64)


def as_batch(log: DecodedLog) -> dict[str, Any]:
    """The log as a batch of the contract."""
    batch: dict[str, Any] = {} if log.start_utc is None else {"start_utc": log.start_utc.isoformat()}
    for stream, names in STREAMS.items():
        samples = getattr(log, stream)
        if samples is not None:
            columns = {name: getattr(samples, name, None) for name in ("time_s", *names)}
            batch[stream] = {name: as_json(values) for name, values in columns.items() if values is not None}
    return batch


def as_json(values: FloatArray) -> list[float | None]:
    """NaN as null."""
    return [float(value) if np.isfinite(value) else None for value in values]


def batch_bytes(log: DecodedLog) -> bytes:
    """The batch as a body."""
    return json.dumps(as_batch(log)).encode()


def as_table(log: DecodedLog, delimiter: str = ",", decimal: str = ".") -> str:
    """The log as a table: a row at each time of any stream, blank where a stream has no sample then."""
    batch = as_batch(log)
    streams = {stream: batch[stream] for stream in STREAMS if stream in batch}
    names = [name for columns in streams.values() for name in columns if name != "time_s"]
    cells: dict[float, dict[str, float]] = {}
    for columns in streams.values():
        for name in columns:
            for time_s, value in zip(columns["time_s"], columns[name], strict=True):
                cells.setdefault(time_s, {})[name] = value
    lines = [delimiter.join(("time_s", *names))]
    for time_s in sorted(cells):
        row = [time_s, *(cells[time_s].get(name) for name in names)]
        lines.append(delimiter.join("" if value is None else repr(value).replace(".", decimal) for value in row))
    return "\n".join(lines) + "\n"

"""Columns by their contract names -> decoded log; the common end of batch and table.

All that is wrong is gathered, each under the JSON Pointer of its column, and raised at once.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from datetime import datetime

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import LogFormat
from service.domain.errors import InputTooLarge, WrongValues
from service.domain.glossary import STREAMS
from service.domain.log import (
    AttitudeSamples,
    DecodedLog,
    GpsSamples,
    LoadFactorSamples,
    ProbeSamples,
    StaticSamples,
    TemperatureSamples,
)
from service.readers.limits import MAXIMUM_SPAN_S, MAXIMUM_TIME_S
from service.readers.plausible import POSSIBLE

Columns = Mapping[str, FloatArray]
"""Column name -> values, `time_s` among them."""

GIVEN_TEMPERATURE_UNCERTAINTY_K = 1.0
"""Of a temperature that the user calls the air's, from a sensor unknown to us."""
LOWEST_FIX = 3.0
"""Kind of GPS fix from which on a velocity is valid."""
REQUIRED_STREAMS = ("probe", "gps")
_REQUIRED_COLUMNS: Mapping[str, tuple[str, ...]] = {
    "probe": ("impact_pressure_pa",),
    "static": ("static_pressure_pa",),
    "temperature": ("air_temperature_k",),
    "gps": (),
    "attitude": (),
    "load_factor": ("load_factor",),
}


@dataclass
class Complaints:
    """What is wrong so far, by JSON Pointer."""

    pointer: Callable[[str, str], str]
    """Stream and column ("" for the whole stream) -> JSON Pointer."""
    place: Callable[[str, int], str]
    """Stream and index of a sample -> where it stands, in words."""
    errors: dict[str, str] = field(default_factory=dict)

    def add(self, stream: str, column: str, message: str) -> None:
        """Note what is wrong; the first complaint about a column stays."""
        self.errors.setdefault(self.pointer(stream, column), message)

    def raise_any(self) -> None:
        """Raise what was gathered.

        Raises
        ------
        WrongValues
        """
        if self.errors:
            pointer, message = next(iter(self.errors.items()))
            raise WrongValues(f"The values are wrong: {pointer}: {message}", self.errors)


def log_from_columns(
    log_format: LogFormat,
    streams: Mapping[str, Columns],
    complaints: Complaints,
    *,
    sha256: str,
    start_utc: datetime | None,
    samples_per_stream: int,
    truncated: bool = False,
) -> DecodedLog:
    """Check the columns and make the log of them. A stream without samples is None in it.

    Parameters
    ----------
    streams : stream name -> its columns, each (n,) of its stream, NaN for gaps; only names of the contract.

    Raises
    ------
    WrongValues
        A required stream or column is missing, lengths differ, times are missing, unsorted or repeated, or a value is
        impossible.
    InputTooLarge
    """
    for stream in REQUIRED_STREAMS:
        if stream not in streams:
            complaints.add(stream, "", f"The stream {stream} is required.")
    sound = {
        name: columns for name, columns in streams.items() if _check(name, columns, complaints, samples_per_stream)
    }
    _check_span(sound, complaints)
    complaints.raise_any()
    given = {name: columns for name, columns in sound.items() if columns["time_s"].size}
    return DecodedLog(
        format=log_format,
        sha256=sha256,
        start_utc=start_utc,
        truncated=truncated,
        time_steps_back=0,
        probe=_probe(given.get("probe")),
        static=_static(given.get("static")),
        temperature=_temperature(given.get("temperature")),
        gps=_gps(given.get("gps")),
        attitude=_attitude(given.get("attitude")),
        load_factor=_load_factor(given.get("load_factor")),
        ground_contact=None,
    )


def _check(stream: str, columns: Columns, complaints: Complaints, samples_per_stream: int) -> bool:
    """Whether the stream has its columns, of one length, with good times; values are checked too."""
    if not _check_presence(stream, columns, complaints):
        return False
    time_s = columns["time_s"]
    if time_s.size > samples_per_stream:
        raise InputTooLarge(f"The stream {stream} has {time_s.size} samples; the limit is {samples_per_stream}.")
    for column, values in columns.items():
        if values.size != time_s.size:
            complaints.add(stream, column, f"This column has {values.size} values, time_s has {time_s.size}.")
        elif column != "time_s":
            _check_values(stream, column, values, complaints)
    return _check_times(stream, time_s, complaints)


def _check_presence(stream: str, columns: Columns, complaints: Complaints) -> bool:
    missing = [column for column in ("time_s", *_REQUIRED_COLUMNS[stream]) if column not in columns]
    for column in missing:
        complaints.add(stream, column, "This column is required.")
    if not any(column in columns for column in STREAMS[stream]):
        complaints.add(stream, "", f"This stream needs one of {', '.join(STREAMS[stream])}.")
        return False
    if stream == "gps":
        return _check_velocity(columns, complaints) and not missing
    return not missing


def _check_velocity(columns: Columns, complaints: Complaints) -> bool:
    pairs = (("velocity_north_mps", "velocity_east_mps"), ("ground_speed_mps", "track_deg"))
    if any(first in columns and second in columns for first, second in pairs):
        return True
    half = [(a, b) for pair in pairs for a, b in (pair, pair[::-1]) if a in columns and b not in columns]
    for there, missing in half:
        complaints.add("gps", missing, f"This column is required beside {there}.")
    if not half:
        message = "This stream needs velocity_north_mps and velocity_east_mps, or ground_speed_mps and track_deg."
        complaints.add("gps", "", message)
    return False


def _check_values(stream: str, column: str, values: FloatArray, complaints: Complaints) -> None:
    low, high = POSSIBLE[column]
    if not values.size or (np.fmin.reduce(values) >= low and np.fmax.reduce(values) <= high):
        return
    wrong = (values < low) | (values > high)
    if wrong.any():
        index = int(np.argmax(wrong))
        where = complaints.place(stream, index)
        message = (
            f"{values[index]:g} at {where} is impossible: {low:g} to {high:g} is the range, in the unit of the name."
        )
        complaints.add(stream, column, message)


def _check_times(stream: str, time_s: FloatArray, complaints: Complaints) -> bool:
    wrong = ~(np.abs(time_s) <= MAXIMUM_TIME_S)
    if wrong.any():
        where = complaints.place(stream, int(np.argmax(wrong)))
        complaints.add(stream, "time_s", f"The time at {where} is missing or beyond {MAXIMUM_TIME_S:g} s.")
        return False
    backward = np.diff(time_s) <= 0.0
    if backward.any():
        index = int(np.argmax(backward)) + 1
        where = complaints.place(stream, index)
        word = "repeats" if time_s[index] == time_s[index - 1] else "stands before"
        message = f"The time {time_s[index]:.12g} at {where} {word} the one before it: times must strictly increase."
        complaints.add(stream, "time_s", message)
        return False
    return True


def _check_span(streams: Mapping[str, Columns], complaints: Complaints) -> None:
    ends = {name: columns["time_s"][[0, -1]] for name, columns in streams.items() if columns["time_s"].size}
    if not ends:
        return
    first, last = min(end[0] for end in ends.values()), max(end[1] for end in ends.values())
    if last - first > MAXIMUM_SPAN_S:
        latest = max(ends, key=lambda name: ends[name][1])
        message = f"The log spans {last - first:g} s; the limit is {MAXIMUM_SPAN_S:g} s. Are the times in seconds?"
        complaints.add(latest, "time_s", message)


def _probe(columns: Columns | None) -> ProbeSamples | None:
    if columns is None:
        return None
    return ProbeSamples(columns["time_s"], columns["impact_pressure_pa"], "impact pressure as given")


def _static(columns: Columns | None) -> StaticSamples | None:
    if columns is None:
        return None
    return StaticSamples(columns["time_s"], columns["static_pressure_pa"], "static pressure as given")


def _temperature(columns: Columns | None) -> TemperatureSamples | None:
    if columns is None:
        return None
    humidity = columns.get("relative_humidity")
    return TemperatureSamples(
        time_s=columns["time_s"],
        air_temperature_k=columns["air_temperature_k"],
        relative_humidity=None if humidity is None else np.minimum(humidity, 1.0),
        source="air temperature as given",
        standard_uncertainty_k=GIVEN_TEMPERATURE_UNCERTAINTY_K,
    )


def _gps(columns: Columns | None) -> GpsSamples | None:
    if columns is None:
        return None
    north, east, source = _horizontal_velocity(columns)
    valid = _has_fix(columns) & np.isfinite(north) & np.isfinite(east)
    down = columns.get("velocity_down_mps")
    return GpsSamples(
        time_s=columns["time_s"],
        velocity_north_mps=np.where(valid, north, np.nan),
        velocity_east_mps=np.where(valid, east, np.nan),
        velocity_down_mps=None if down is None else np.where(valid, down, np.nan),
        latitude_deg=columns.get("latitude_deg"),
        longitude_deg=columns.get("longitude_deg"),
        altitude_m=columns.get("altitude_m"),
        speed_uncertainty_mps=columns.get("speed_uncertainty_mps"),
        source=source,
    )


def _horizontal_velocity(columns: Columns) -> tuple[FloatArray, FloatArray, str]:
    """North and east [m/s]; components count before speed and track where both are given."""
    if "velocity_north_mps" in columns and "velocity_east_mps" in columns:
        return columns["velocity_north_mps"], columns["velocity_east_mps"], "GPS velocity as given"
    speed, track = columns["ground_speed_mps"], np.radians(columns["track_deg"])
    return speed * np.cos(track), speed * np.sin(track), "GPS ground speed and track as given"


def _has_fix(columns: Columns) -> BoolArray:
    """(n,) whether the fix is one; a sample whose fix is not stated counts as having one."""
    fix = columns.get("fix")
    return np.ones(columns["time_s"].size, dtype=np.bool_) if fix is None else ~(fix < LOWEST_FIX)


def _attitude(columns: Columns | None) -> AttitudeSamples | None:
    if columns is None:
        return None
    unknown = np.full(columns["time_s"].size, np.nan)
    roll, pitch, yaw = (columns.get(name, unknown) for name in STREAMS["attitude"])
    return AttitudeSamples(columns["time_s"], roll, pitch, yaw)


def _load_factor(columns: Columns | None) -> LoadFactorSamples | None:
    if columns is None:
        return None
    return LoadFactorSamples(columns["time_s"], columns["load_factor"], "load factor as given")

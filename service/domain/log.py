"""A decoded log: what the readers give to the reduction, whatever the format was.

Every stream keeps its own rate on one time axis in seconds. Contract of each stream: `time_s` is finite and strictly
increasing; every other array has its length; NaN marks a gap; units are in the names. Optional arrays are None when the
source does not carry them. `source` says in plain words where the stream came from (no names of firmware or hardware).
"""

from dataclasses import dataclass
from datetime import datetime

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import LogFormat


@dataclass(frozen=True, slots=True)
class ProbeSamples:
    """Total minus static pressure as read, uncorrected."""

    time_s: FloatArray
    impact_pressure_pa: FloatArray
    source: str
    compensated: bool = True
    """False when the source is known to carry the sensor's raw, uncompensated zero."""
    reordered: BoolArray | None = None
    """(n,) samples that stood behind later ones in the source and were sorted; None: none."""


@dataclass(frozen=True, slots=True)
class StaticSamples:
    time_s: FloatArray
    static_pressure_pa: FloatArray
    source: str


@dataclass(frozen=True, slots=True)
class TemperatureSamples:
    time_s: FloatArray
    air_temperature_k: FloatArray
    relative_humidity: FloatArray | None
    """Fraction 0..1."""
    source: str
    standard_uncertainty_k: float
    """Of the source as a measure of outside air: large for a sensor inside the probe's housing or the board's own."""


@dataclass(frozen=True, slots=True)
class GpsSamples:
    """Samples without a valid fix keep their time and are NaN in every velocity."""

    time_s: FloatArray
    velocity_north_mps: FloatArray
    velocity_east_mps: FloatArray
    velocity_down_mps: FloatArray | None
    latitude_deg: FloatArray | None
    longitude_deg: FloatArray | None
    altitude_m: FloatArray | None
    """Above mean sea level."""
    speed_uncertainty_mps: FloatArray | None
    source: str


@dataclass(frozen=True, slots=True)
class AttitudeSamples:
    time_s: FloatArray
    roll_deg: FloatArray
    pitch_deg: FloatArray
    yaw_deg: FloatArray


@dataclass(frozen=True, slots=True)
class LoadFactorSamples:
    """Normal load factor, 1 in level flight. [1]"""

    time_s: FloatArray
    load_factor: FloatArray
    source: str


@dataclass(frozen=True, slots=True)
class GroundContactSamples:
    """The recorder's own notion of standing on the ground."""

    time_s: FloatArray
    on_ground: BoolArray


@dataclass(frozen=True, slots=True)
class SensorNote:
    """One instance of a sensor that the log holds: whether it was chosen, and why."""

    sensor: str
    """`probe`, `static`, `temperature`, `gps`, `attitude` or `load_factor`."""
    instance: int
    samples: int
    chosen: bool
    dead: bool
    reason: str
    start_s: float
    end_s: float


@dataclass(frozen=True, slots=True)
class ReadingGap:
    """A span for which the recorder itself says that it lost data."""

    start_s: float
    end_s: float


@dataclass(frozen=True, slots=True)
class DecodedLog:
    format: LogFormat
    sha256: str
    start_utc: datetime | None
    """The instant of time_s = 0."""
    truncated: bool
    time_steps_back: int
    """How many samples stood before their predecessor and were sorted."""
    probe: ProbeSamples | None
    static: StaticSamples | None
    temperature: TemperatureSamples | None
    gps: GpsSamples | None
    attitude: AttitudeSamples | None
    load_factor: LoadFactorSamples | None
    ground_contact: GroundContactSamples | None
    sensors: tuple[SensorNote, ...] = ()
    gaps: tuple[ReadingGap, ...] = ()

"""What is known of a simulated flight: the log as a reader would hand it on, and the truth behind it."""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.log import DecodedLog
from service.domain.settings import Settings
from tests.synthetic.gust_field import GustModel


@dataclass(frozen=True, slots=True)
class TrueLoiter:
    """A span of circles, or of a pattern of legs (`direction` 0), as flown. [s]"""

    start_s: float
    end_s: float
    direction: int
    """+1 right turns, -1 left turns, 0 a pattern of legs."""
    mean_air_north_mps: float
    mean_air_east_mps: float
    """Mean velocity of the air along the path: mean wind and gusts."""


@dataclass(frozen=True, slots=True)
class TrueFault:
    fault: FaultKind
    sensor: str
    start_s: float
    end_s: float


@dataclass(frozen=True, slots=True)
class TrueNoise:
    """Standard deviations of the sensors' own noise, white but for the slow part of the GPS."""

    probe_pa: float
    gps_mps: float
    """Of a horizontal component of velocity."""
    gps_slow_mps: float
    gps_slow_time_s: float
    """In which its correlation falls to 1/e."""


@dataclass(frozen=True, slots=True)
class Truth:
    """Arrays without a word about their times are (k,), at `time_s`, ten a second."""

    pressure_scale: float
    zero_offset_pa: float
    gps_delay_s: float
    sigma_mps: float
    length_m: float
    gust: GustModel
    """All that the gust field was drawn from."""
    noise: TrueNoise
    mean_wind_north_mps: float
    mean_wind_east_mps: float
    """Mean wind at 100 m at the start, without gusts."""
    loiters: tuple[TrueLoiter, ...]
    probe_true_airspeed_mps: FloatArray
    """At the times of the probe as it was made (before a fault took samples away)."""
    probe_calibrated_airspeed_mps: FloatArray
    probe_time_s: FloatArray
    time_s: FloatArray
    air_north_mps: FloatArray
    air_east_mps: FloatArray
    """Velocity of the air at the aircraft: mean wind and gust."""
    air_down_mps: FloatArray
    undisturbed_north_mps: FloatArray
    undisturbed_east_mps: FloatArray
    """Mean wind at the aircraft's height and time: the velocity of the air without its gusts."""
    ground_velocity_mps: FloatArray
    """(3, k) north, east, down."""
    true_airspeed_mps: FloatArray
    heading_deg: FloatArray
    """Of the air velocity."""
    fuselage_heading_deg: FloatArray
    height_m: FloatArray
    """Above the ground."""
    load_factor: FloatArray
    static_pressure_pa: FloatArray
    air_temperature_k: FloatArray
    on_ground: BoolArray

    @property
    def speed_scale(self) -> float:
        """Square root of the pressure scale, as the contract reports it."""
        return float(np.sqrt(self.pressure_scale))

    def mean_air_velocity(self, windows: Iterable[tuple[float, float]]) -> tuple[float, float]:
        """Velocity of the air north and east, averaged over the path and time of windows (start, end). [m/s]"""
        inside = np.zeros(self.time_s.size, dtype=np.bool_)
        for start_s, end_s in windows:
            inside |= (self.time_s >= start_s) & (self.time_s <= end_s)
        return float(self.air_north_mps[inside].mean()), float(self.air_east_mps[inside].mean())


@dataclass(frozen=True, slots=True)
class SimulatedFlight:
    family: str
    seed: int
    index: int
    log: DecodedLog
    settings: Settings
    truth: Truth
    faults: tuple[TrueFault, ...] = ()

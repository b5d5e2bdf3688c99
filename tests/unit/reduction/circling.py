"""A constructed circling flight with gusts for the tests of faults: simple, seeded, of known pressure and wind."""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.ndimage import uniform_filter1d
from scipy.signal import lfilter

from service.domain.arrays import FloatArray
from service.domain.log import StaticSamples
from service.domain.results import AirDataSeries
from tests.unit.reduction.constructed import series_of

WIND_NORTH_MPS, WIND_EAST_MPS = 3.0, -5.0
AIRSPEED_MPS = 17.0
TURN_S = 32.0
SEA_LEVEL_PA = 101325.0
DENSITY = 1.225
PASCAL_PER_METRE = DENSITY * 9.80665


@dataclass(frozen=True, slots=True)
class Circling:
    """The series, the static sensor's samples, and the dynamic pressure without zero and noise (n,) [Pa]."""

    series: AirDataSeries
    static: StaticSamples
    dynamic_pa: FloatArray

    @property
    def time_s(self) -> FloatArray:
        return self.series.time_s

    def reading(self, reading_pa: FloatArray) -> AirDataSeries:
        """The series with another reading."""
        return replace(self.series, reading_pa=reading_pa)


def correlated(rng: np.random.Generator, count: int, step_s: float, deviation: float, memory_s: float) -> FloatArray:
    """(count,) Gauss-Markov process."""
    keep = float(np.exp(-step_s / memory_s))
    drive = rng.normal(0.0, deviation * np.sqrt(1.0 - keep**2), count)
    drive[0] = rng.normal(0.0, deviation)
    return np.asarray(lfilter([1.0], [1.0, -keep], drive))


def circling(
    seed: int = 1,
    *,
    duration_s: float = 300.0,
    step_s: float = 0.1,
    gust_mps: float = 0.4,
    pressure_scale: float = 1.0,
    zero_pa: float = 0.0,
    noise_pa: float = 0.7,
    rest_s: float = 0.0,
    speed_mps: float | None = None,
    **changes: Any,
) -> Circling:
    """Level circles in a steady wind, after `rest_s` at rest; `changes` are fields of the series."""
    rng = np.random.default_rng(seed)
    time_s = np.arange(0.0, duration_s, step_s)
    flies = time_s >= rest_s
    gust = correlated(rng, time_s.size, step_s, gust_mps, 8.0)
    speed = np.where(flies, (AIRSPEED_MPS if speed_mps is None else speed_mps) + gust, 0.0)
    wander_m = uniform_filter1d(correlated(rng, time_s.size, step_s, 1.0, 6.0), max(round(4.0 / step_s), 1))
    height_m = np.where(flies, 100.0 + wander_m, 0.0)
    dynamic_pa = 0.5 * DENSITY * speed**2
    static_pa = SEA_LEVEL_PA - PASCAL_PER_METRE * height_m
    gps_s = np.arange(0.0, duration_s, 0.2)
    heading = 2.0 * np.pi * gps_s / TURN_S
    moving = np.interp(gps_s, time_s, flies.astype(float)) > 0.5
    # GPS sees the commanded airspeed; what the gusts do to the ground speed is small beside it.
    along = np.where(moving, AIRSPEED_MPS if speed_mps is None else speed_mps, 0.0)
    series = series_of(
        dynamic_pa / pressure_scale + zero_pa + rng.normal(0.0, noise_pa, time_s.size),
        time_s=time_s,
        static_pressure_pa=static_pa,
        altitude_m=height_m,
        on_ground=~flies,
        at_rest=~flies,
        gps_time_s=gps_s,
        velocity_north_mps=along * np.cos(heading) + WIND_NORTH_MPS * moving + rng.normal(0.0, 0.07, gps_s.size),
        velocity_east_mps=along * np.sin(heading) + WIND_EAST_MPS * moving + rng.normal(0.0, 0.07, gps_s.size),
        velocity_down_mps=np.zeros(gps_s.size),
        gps_altitude_m=np.interp(gps_s, time_s, height_m) + rng.normal(0.0, 0.3, gps_s.size),
        gps_on_ground=~moving,
    )
    static = StaticSamples(time_s, static_pa + rng.normal(0.0, 1.5, time_s.size), "static")
    return Circling(replace(series, **changes), static, dynamic_pa)

"""True airspeed of the probe at the GPS sample times, with its derivatives."""

from dataclasses import dataclass

import numpy as np

from service.airdata.pitot import true_airspeed_from_impact_pressure, true_airspeed_slope
from service.domain.arrays import BoolArray, FloatArray
from service.domain.results import AirDataSeries

MARGIN_S = 3.0
"""Probe samples kept beyond the fitted span, for delay and averaging."""
LONGEST_BRIDGE_S = 1.6
"""Longest gap between usable probe samples over which the airspeed is interpolated (1 Hz recordings exist)."""
LEAST_PRESSURE_PA = 1e-3
LARGEST_PRESSURE_SHARE = 0.85
"""Of static pressure: just below Mach 1, where the subsonic relation ends."""


@dataclass(frozen=True, slots=True)
class SpeedAtGps:
    """(m,) true airspeed and its derivatives by ln K, by zero offset and by time at m GPS samples."""

    speed_mps: FloatArray
    per_log_scale: FloatArray
    per_zero_offset: FloatArray
    per_second: FloatArray


class ProbeSpeed:
    """The usable samples of a probe near the fitted spans, ready to be evaluated for any scale, zero and delay.

    Airspeed is a scalar, so averaging it over one GPS interval and interpolating it is harmless; velocity vectors are
    never averaged.
    """

    def __init__(self, series: AirDataSeries, usable: BoolArray, gps_time_s: FloatArray) -> None:
        near = usable & (series.time_s > gps_time_s[0] - MARGIN_S) & (series.time_s < gps_time_s[-1] + MARGIN_S)
        self._time_s = series.time_s[near]
        self._reading_pa = series.reading_pa[near]
        self._static_pa = series.static_pressure_pa[near]
        self._temperature_k = series.air_temperature_k[near]
        interval = float(np.median(np.diff(gps_time_s))) if gps_time_s.size > 1 else 0.2
        self._half_s = 0.5 * min(interval, 1.0)

    @property
    def reading_pa(self) -> FloatArray:
        return self._reading_pa

    def covers(self, gps_time_s: FloatArray, delay_s: float) -> BoolArray:
        """(m,) whether usable probe samples lie close about each GPS time less the delay."""
        if self._time_s.size < 2:
            return np.zeros(gps_time_s.size, dtype=bool)
        at = gps_time_s - delay_s
        after = np.clip(np.searchsorted(self._time_s, at), 1, self._time_s.size - 1)
        gap = self._time_s[after] - self._time_s[after - 1]
        inside = (at >= self._time_s[0] - 0.5) & (at <= self._time_s[-1] + 0.5)
        return inside & (gap <= LONGEST_BRIDGE_S)

    def reading_at(self, gps_time_s: FloatArray, delay_s: float) -> FloatArray:
        """(m,) mean reading about each GPS time. [Pa]"""
        return self._mean_about(gps_time_s - delay_s, self._reading_pa)

    def at(self, gps_time_s: FloatArray, log_scale: float, zero_offset_pa: float, delay_s: float) -> SpeedAtGps:
        impact_pa = np.exp(log_scale) * (self._reading_pa - zero_offset_pa)
        positive = np.clip(impact_pa, LEAST_PRESSURE_PA, LARGEST_PRESSURE_SHARE * self._static_pa)
        speed = true_airspeed_from_impact_pressure(positive, self._static_pa, self._temperature_k)
        slope = true_airspeed_slope(positive, self._static_pa, self._temperature_k)
        at = gps_time_s - delay_s
        step = max(self._half_s, 0.25)
        return SpeedAtGps(
            speed_mps=self._mean_about(at, speed),
            per_log_scale=self._mean_about(at, slope),
            per_zero_offset=self._mean_about(at, -slope * np.exp(log_scale) / positive),
            per_second=(self._mean_about(at + step, speed) - self._mean_about(at - step, speed)) / (2 * step),
        )

    def _mean_about(self, at_s: FloatArray, values: FloatArray) -> FloatArray:
        """Mean of the broken line through `values` over one GPS interval about each of `at_s`."""
        time_s = self._time_s
        total = np.concatenate([[0.0], np.cumsum(0.5 * (values[1:] + values[:-1]) * np.diff(time_s))])
        low = np.clip(at_s - self._half_s, time_s[0], time_s[-1])
        high = np.clip(at_s + self._half_s, time_s[0], time_s[-1])

        def integral(end_s: FloatArray) -> FloatArray:
            index = np.clip(np.searchsorted(time_s, end_s) - 1, 0, time_s.size - 2)
            share = (end_s - time_s[index]) / (time_s[index + 1] - time_s[index])
            ending = values[index] + share * (values[index + 1] - values[index])
            return total[index] + 0.5 * (values[index] + ending) * (end_s - time_s[index])

        span = high - low
        return np.where(
            span > 1e-6, (integral(high) - integral(low)) / np.maximum(span, 1e-6), np.interp(at_s, time_s, values)
        )

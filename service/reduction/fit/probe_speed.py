"""True airspeed of the probe at the GPS sample times, with its derivatives."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.airdata.pitot import true_airspeed_from_impact_pressure, true_airspeed_slope
from service.domain.arrays import BoolArray, FloatArray, IntArray
from service.domain.results import AirDataSeries

MARGIN_S = 3.0
"""Probe samples kept about each GPS sample of the fit, for delay and averaging."""
LONGEST_BRIDGE_S = 1.6
"""Longest gap between usable probe samples over which the airspeed is interpolated (1 Hz recordings exist)."""
FINEST_INTERVAL_S = 0.1
"""Faster probes are averaged over this: the air does not change over two metres as an aircraft feels it."""
LEAST_PRESSURE_PA = 1e-3
LARGEST_PRESSURE_SHARE = 0.85
"""Of static pressure: just below Mach 1, where the subsonic relation ends."""


@dataclass(frozen=True, slots=True)
class SpeedAtGps:
    """(m,) true airspeed and its derivatives by ln K and by zero offset at m GPS samples."""

    speed_mps: FloatArray
    per_log_scale: FloatArray
    per_zero_offset: FloatArray


class _Averaging:
    """Means of the broken line through samples at `from_s` over `half_s` to either side of each of `at_s`.

    Worked out once, for any values: the mean is the difference of the line's integral at both ends.
    """

    def __init__(self, from_s: FloatArray, at_s: FloatArray, half_s: float) -> None:
        self._step_s = np.diff(from_s)
        low, high = (np.clip(at_s + sign * half_s, from_s[0], from_s[-1]) for sign in (-1, 1))
        self._span_s = high - low
        self._ends = [self._place(from_s, end) for end in (low, high)]

    def _place(self, from_s: FloatArray, end_s: FloatArray) -> tuple[IntArray, FloatArray]:
        index = np.clip(np.searchsorted(from_s, end_s) - 1, 0, from_s.size - 2)
        return index, (end_s - from_s[index]) / self._step_s[index]

    def mean(self, values: FloatArray) -> FloatArray:
        total = np.concatenate([[0.0], np.cumsum(0.5 * (values[1:] + values[:-1]) * self._step_s)])
        rise = np.diff(values)
        integrals = []
        for index, share in self._ends:
            ending = values[index] + 0.5 * share * rise[index]
            integrals.append(total[index] + ending * share * self._step_s[index])
        index, share = self._ends[0]
        at_a_point = values[index] + share * rise[index]
        return np.where(self._span_s > 1e-6, (integrals[1] - integrals[0]) / np.maximum(self._span_s, 1e-6), at_a_point)


def _binned(columns: Sequence[FloatArray]) -> list[FloatArray]:
    """Means over FINEST_INTERVAL_S of columns recorded more often, times first; a gap ends a bin."""
    time_s = columns[0]
    interval_s = float(np.median(np.diff(time_s))) if time_s.size > 1 else FINEST_INTERVAL_S
    size = int(FINEST_INTERVAL_S / max(interval_s, 1e-4) + 1e-6)
    if size < 2:
        return list(columns)
    after_gap = np.concatenate([[True], np.diff(time_s) > 2 * interval_s])
    run_start = np.maximum.accumulate(np.where(after_gap, np.arange(time_s.size), 0))
    first = np.flatnonzero((np.arange(time_s.size) - run_start) % size == 0)
    count = np.diff(np.append(first, time_s.size))
    return [np.add.reduceat(column, first) / count for column in columns]


class ProbeSpeed:
    """The usable samples of a probe near the fitted spans, ready to be evaluated for any scale, zero and delay.

    Airspeed is a scalar, so averaging it over one GPS interval and interpolating it is harmless; velocity vectors are
    never averaged.
    """

    def __init__(self, series: AirDataSeries, usable: BoolArray, gps_time_s: FloatArray) -> None:
        near = usable & _near(series.time_s, gps_time_s)
        columns = (series.time_s, series.reading_pa, series.static_pressure_pa, series.air_temperature_k)
        self._time_s, self._reading_pa, self._static_pa, self._temperature_k = _binned([c[near] for c in columns])
        interval = float(np.median(np.diff(gps_time_s))) if gps_time_s.size > 1 else 0.2
        self._half_s = 0.5 * min(interval, 1.0)
        self._last: tuple[FloatArray, float, _Averaging] | None = None

    def covers(self, gps_time_s: FloatArray, delay_s: float) -> BoolArray:
        """(m,) whether usable probe samples lie close about each GPS time less the delay."""
        if self._time_s.size < 2:
            return np.zeros(gps_time_s.size, dtype=bool)
        at = gps_time_s - delay_s
        after = np.clip(np.searchsorted(self._time_s, at), 1, self._time_s.size - 1)
        gap = self._time_s[after] - self._time_s[after - 1]
        inside = (at >= self._time_s[0] - 0.5) & (at <= self._time_s[-1] + 0.5)
        return np.asarray(inside & (gap <= LONGEST_BRIDGE_S))

    def reading_at(self, gps_time_s: FloatArray, delay_s: float) -> FloatArray:
        """(m,) mean reading about each GPS time. [Pa]"""
        return self._averaging(gps_time_s, delay_s).mean(self._reading_pa)

    def at(self, gps_time_s: FloatArray, log_scale: float, zero_offset_pa: float, delay_s: float) -> SpeedAtGps:
        """Airspeed and slopes at the GPS times, for ln K, zero offset and delay."""
        impact_pa = self._impact_pa(log_scale, zero_offset_pa)
        slope = true_airspeed_slope(impact_pa, self._static_pa, self._temperature_k)
        averaging = self._averaging(gps_time_s, delay_s)
        return SpeedAtGps(
            speed_mps=averaging.mean(
                true_airspeed_from_impact_pressure(impact_pa, self._static_pa, self._temperature_k)
            ),
            per_log_scale=averaging.mean(slope),
            per_zero_offset=averaging.mean(-slope * np.exp(log_scale) / impact_pa),
        )

    def acceleration_at(
        self, gps_time_s: FloatArray, log_scale: float, zero_offset_pa: float, delay_s: float
    ) -> FloatArray:
        """(m,) rate of change of the airspeed. [m/s^2]"""
        impact_pa = self._impact_pa(log_scale, zero_offset_pa)
        speed = true_airspeed_from_impact_pressure(impact_pa, self._static_pa, self._temperature_k)
        step_s = max(self._half_s, 0.25)
        before, after = (
            _Averaging(self._time_s, gps_time_s - delay_s + shift, self._half_s).mean(speed)
            for shift in (-step_s, step_s)
        )
        return np.asarray((after - before) / (2 * step_s))

    def _impact_pa(self, log_scale: float, zero_offset_pa: float) -> FloatArray:
        impact_pa = np.exp(log_scale) * (self._reading_pa - zero_offset_pa)
        return np.asarray(np.clip(impact_pa, LEAST_PRESSURE_PA, LARGEST_PRESSURE_SHARE * self._static_pa))

    def _averaging(self, gps_time_s: FloatArray, delay_s: float) -> _Averaging:
        if self._last is None or self._last[0] is not gps_time_s or self._last[1] != delay_s:
            self._last = (gps_time_s, delay_s, _Averaging(self._time_s, gps_time_s - delay_s, self._half_s))
        return self._last[2]


def _near(time_s: FloatArray, others_s: FloatArray) -> BoolArray:
    """(n,) whether each time lies within the margin of one of the others.

    A long flight is thinned to a few of its turns: what was read between them would be worked out in vain.
    """
    ordered = np.sort(others_s)
    after = np.searchsorted(ordered, time_s)
    to_next = ordered[np.minimum(after, ordered.size - 1)] - time_s
    to_last = time_s - ordered[np.maximum(after - 1, 0)]
    return np.asarray(np.minimum(np.abs(to_next), np.abs(to_last)) < MARGIN_S)

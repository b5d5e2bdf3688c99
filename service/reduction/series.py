"""Decoded log -> air-data series: everything on the probe's times, gaps filled by stated assumptions."""

import numpy as np

from service.airdata import atmosphere
from service.airdata.constants import SEA_LEVEL_TEMPERATURE_K
from service.airdata.humidity import virtual_temperature_from_humidity
from service.domain.arrays import BoolArray, FloatArray
from service.domain.log import DecodedLog, GpsSamples, ProbeSamples
from service.domain.results import AirDataSeries
from service.domain.spans import within

MEASURED_STATIC_UNCERTAINTY_PA = 50.0
"""Of a barometer's calibration: half a hectopascal is common practice for such sensors."""
STANDARD_STATIC_UNCERTAINTY_PA = 1000.0
"""Day-to-day spread of sea-level pressure about the standard value: about 10 hPa (common practice)."""
UNKNOWN_ALTITUDE_STATIC_UNCERTAINTY_PA = 5000.0
"""Without any altitude the aircraft is taken to be within some 400 m of sea level."""
STANDARD_TEMPERATURE_UNCERTAINTY_K = 10.0
"""Spread of the air about the standard atmosphere (the design notes' prior)."""
CLIMB_RATE_WINDOW_S = 3.0

_NONE = np.empty(0)
_NO_GPS = GpsSamples(
    time_s=_NONE,
    velocity_north_mps=_NONE,
    velocity_east_mps=_NONE,
    velocity_down_mps=None,
    latitude_deg=None,
    longitude_deg=None,
    altitude_m=None,
    speed_uncertainty_mps=None,
    source="none",
)


def build_series(log: DecodedLog, probe: ProbeSamples, ground_s: FloatArray, rest_s: FloatArray) -> AirDataSeries:
    """Join the streams of `log` on the times of its `probe`.

    Parameters
    ----------
    ground_s, rest_s : (k, 2) float
        Spans on the ground, and of those the spans at rest. [s]
    """
    time_s = probe.time_s
    gps = log.gps or _NO_GPS
    valid = np.isfinite(gps.velocity_north_mps) & np.isfinite(gps.velocity_east_mps)
    gps_time_s = gps.time_s[valid]
    gps_altitude_m = np.full(gps_time_s.size, np.nan) if gps.altitude_m is None else gps.altitude_m[valid]
    static_pa, static_uncertainty_pa, standard_static = _static_pressure(log, gps, time_s)
    temperature_k, temperature_uncertainty_k, standard_temperature = _temperature(log, time_s, static_pa)
    down_mps, has_down = _velocity_down(log, gps, valid, gps_time_s)
    altitude_m = _resampled(gps_time_s, gps_altitude_m, time_s)
    if not np.isfinite(altitude_m).any() and not standard_static:
        altitude_m = atmosphere.pressure_altitude_from_pressure(static_pa)
        gps_altitude_m = np.interp(gps_time_s, time_s, altitude_m) if time_s.size else gps_altitude_m
    return AirDataSeries(
        time_s=time_s,
        reading_pa=probe.impact_pressure_pa,
        reordered=np.zeros(time_s.size, dtype=bool) if probe.reordered is None else probe.reordered,
        static_pressure_pa=static_pa,
        air_temperature_k=temperature_k,
        temperature_uncertainty_k=temperature_uncertainty_k,
        static_uncertainty_pa=static_uncertainty_pa,
        altitude_m=altitude_m,
        on_ground=within(time_s, ground_s),
        at_rest=within(time_s, rest_s),
        gps_time_s=gps_time_s,
        velocity_north_mps=gps.velocity_north_mps[valid],
        velocity_east_mps=gps.velocity_east_mps[valid],
        velocity_down_mps=down_mps,
        has_velocity_down=has_down,
        gps_altitude_m=gps_altitude_m,
        gps_on_ground=within(gps_time_s, ground_s),
        compensated_zero=probe.compensated,
        standard_static=standard_static,
        standard_temperature=standard_temperature,
        probe_source=probe.source,
        static_source=_static_source(log, standard_static),
        temperature_source="standard atmosphere"
        if log.temperature is None or standard_temperature
        else log.temperature.source,
    )


def _static_source(log: DecodedLog, standard_static: bool) -> str:
    if log.static is not None and not standard_static:
        return log.static.source
    return "standard atmosphere at the GPS altitude"


def _resampled(from_s: FloatArray, values: FloatArray, to_s: FloatArray) -> FloatArray:
    """`values` at `to_s`, linear between finite samples, held beyond the ends; NaN where none is finite."""
    known = np.isfinite(values)
    if not known.any():
        return np.full(to_s.size, np.nan)
    return np.interp(to_s, from_s[known], values[known])


def _static_pressure(log: DecodedLog, gps: GpsSamples, time_s: FloatArray) -> tuple[FloatArray, float, bool]:
    if log.static is not None and np.isfinite(log.static.static_pressure_pa).any():
        pressure = _resampled(log.static.time_s, log.static.static_pressure_pa, time_s)
        return pressure, MEASURED_STATIC_UNCERTAINTY_PA, False
    if gps.altitude_m is not None and np.isfinite(gps.altitude_m).any():
        altitude = np.clip(_resampled(gps.time_s, gps.altitude_m, time_s), -1000.0, 20000.0)
        return atmosphere.standard_pressure_from_altitude(altitude), STANDARD_STATIC_UNCERTAINTY_PA, True
    sea_level = atmosphere.standard_pressure_from_altitude(np.zeros(time_s.size))
    return sea_level, UNKNOWN_ALTITUDE_STATIC_UNCERTAINTY_PA, True


def _temperature(log: DecodedLog, time_s: FloatArray, static_pa: FloatArray) -> tuple[FloatArray, float, bool]:
    """Temperature (virtual where the humidity is known), its standard uncertainty, whether it is the standard one."""
    measured = log.temperature
    if measured is not None and np.isfinite(measured.air_temperature_k).any():
        temperature = _resampled(measured.time_s, measured.air_temperature_k, time_s)
        if measured.relative_humidity is not None and np.isfinite(measured.relative_humidity).any():
            humidity = np.clip(_resampled(measured.time_s, measured.relative_humidity, time_s), 0.0, 1.0)
            moist = virtual_temperature_from_humidity(static_pa, temperature, humidity)
            temperature = np.where(np.isfinite(moist), moist, temperature)
        return temperature, measured.standard_uncertainty_k, False
    standard = atmosphere.standard_temperature_from_altitude(atmosphere.pressure_altitude_from_pressure(static_pa))
    standard = np.where(np.isfinite(standard), standard, SEA_LEVEL_TEMPERATURE_K)
    return standard, STANDARD_TEMPERATURE_UNCERTAINTY_K, True


def _velocity_down(
    log: DecodedLog, gps: GpsSamples, valid: BoolArray, gps_time_s: FloatArray
) -> tuple[FloatArray, bool]:
    """The GPS's own, else minus the climb rate of static pressure, else zeros (and False)."""
    if gps.velocity_down_mps is not None:
        down = gps.velocity_down_mps[valid]
        if down.size and np.isfinite(down).mean() > 0.5:
            return _resampled(gps_time_s, down, gps_time_s), True
    if log.static is not None and log.static.time_s.size > 3 and gps_time_s.size:
        known = np.isfinite(log.static.static_pressure_pa)
        if known.sum() > 3:
            height = atmosphere.pressure_altitude_from_pressure(log.static.static_pressure_pa[known])
            return -_rate(log.static.time_s[known], height, gps_time_s), True
    return np.zeros(gps_time_s.size), False


def _rate(time_s: FloatArray, values: FloatArray, at_s: FloatArray) -> FloatArray:
    """Slope of `values` over a window about each of `at_s`: difference of the means of its two halves."""
    total = np.concatenate([[0.0], np.cumsum(0.5 * (values[1:] + values[:-1]) * np.diff(time_s))])

    def mean(start: FloatArray, end: FloatArray) -> FloatArray:
        low, high = np.clip(start, time_s[0], time_s[-1]), np.clip(end, time_s[0], time_s[-1])
        span = np.maximum(high - low, 1e-9)
        average = (np.interp(high, time_s, total) - np.interp(low, time_s, total)) / span
        return np.where(high - low > 1e-6, average, np.interp(low, time_s, values))

    half = CLIMB_RATE_WINDOW_S / 2
    return (mean(at_s, at_s + half) - mean(at_s - half, at_s)) / half

"""Standard atmosphere from -5 to 20 km, both ways, and the gas relations of dry air.

Altitude is **geopotential** unless the name says geometric: at 8000 m geometric the two differ by 10 m. Outside the
range, and for NaN, the answer is NaN; no warning is raised. Every function takes numbers or arrays that broadcast, as
numpy's own ufuncs do, and answers in float64 of the broadcast shape.

References
----------
[1] ISO 2533:1975, Standard atmosphere; ICAO Doc 7488/3.
[2] US Standard Atmosphere, 1976.
"""

from typing import Final

import numpy as np
from numpy.typing import ArrayLike

from service.airdata.constants import (
    EARTH_RADIUS_M,
    GAS_CONSTANT_DRY_AIR,
    HIGHEST_ALTITUDE_M,
    LAPSE_RATE_KPM,
    LOWEST_ALTITUDE_M,
    SEA_LEVEL_PRESSURE_PA,
    SEA_LEVEL_SPEED_OF_SOUND_MPS,
    SEA_LEVEL_TEMPERATURE_K,
    STANDARD_GRAVITY_MPS2,
    SUTHERLAND_COEFFICIENT,
    SUTHERLAND_TEMPERATURE_K,
    TROPOPAUSE_ALTITUDE_M,
)
from service.domain.arrays import FloatArray

_PRESSURE_EXPONENT: Final = -STANDARD_GRAVITY_MPS2 / (LAPSE_RATE_KPM * GAS_CONSTANT_DRY_AIR)
_TROPOPAUSE_TEMPERATURE_K: Final = SEA_LEVEL_TEMPERATURE_K + LAPSE_RATE_KPM * TROPOPAUSE_ALTITUDE_M
_ISOTHERMAL_SCALE_HEIGHT_M: Final = GAS_CONSTANT_DRY_AIR * _TROPOPAUSE_TEMPERATURE_K / STANDARD_GRAVITY_MPS2


def standard_temperature_from_altitude(geopotential_altitude_m: ArrayLike) -> FloatArray:
    """Air temperature of the standard atmosphere. [K]

    Parameters
    ----------
    geopotential_altitude_m : (n,) float [m], -5000 to 20000; else NaN.
    """
    altitude = _within_range(geopotential_altitude_m)
    return SEA_LEVEL_TEMPERATURE_K + LAPSE_RATE_KPM * np.minimum(altitude, TROPOPAUSE_ALTITUDE_M)


def standard_pressure_from_altitude(geopotential_altitude_m: ArrayLike) -> FloatArray:
    """Static pressure of the standard atmosphere. [Pa] Inverse: `pressure_altitude_from_pressure`.

    Parameters
    ----------
    geopotential_altitude_m : (n,) float [m], -5000 to 20000; else NaN.
    """
    altitude = _within_range(geopotential_altitude_m)
    # one expression serves both layers: each term is zero in the other's layer
    cooling = np.log1p(LAPSE_RATE_KPM * np.minimum(altitude, TROPOPAUSE_ALTITUDE_M) / SEA_LEVEL_TEMPERATURE_K)
    above_tropopause = np.maximum(altitude - TROPOPAUSE_ALTITUDE_M, 0.0)
    return SEA_LEVEL_PRESSURE_PA * np.exp(_PRESSURE_EXPONENT * cooling - above_tropopause / _ISOTHERMAL_SCALE_HEIGHT_M)


def standard_density_from_altitude(geopotential_altitude_m: ArrayLike) -> FloatArray:
    """Air density of the standard atmosphere. [kg/m3] NaN outside -5000 to 20000 m."""
    return dry_air_density_from_pressure(
        standard_pressure_from_altitude(geopotential_altitude_m),
        standard_temperature_from_altitude(geopotential_altitude_m),
    )


def standard_speed_of_sound_from_altitude(geopotential_altitude_m: ArrayLike) -> FloatArray:
    """Speed of sound in the standard atmosphere. [m/s] NaN outside -5000 to 20000 m."""
    return speed_of_sound_from_temperature(standard_temperature_from_altitude(geopotential_altitude_m))


def pressure_altitude_from_pressure(static_pressure_pa: ArrayLike) -> FloatArray:
    """Geopotential altitude at which the standard atmosphere has this pressure. [m]

    Parameters
    ----------
    static_pressure_pa : (n,) float [Pa]; NaN outside the pressures of -5000 to 20000 m.
    """
    pressure = np.asarray(static_pressure_pa, dtype=np.float64)
    inside = (pressure >= _LOWEST_PRESSURE_PA) & (pressure <= _HIGHEST_PRESSURE_PA)
    pressure = np.where(inside, pressure, np.nan)
    log_ratio = np.log(np.maximum(pressure, _TROPOPAUSE_PRESSURE_PA) / SEA_LEVEL_PRESSURE_PA)
    below_tropopause = SEA_LEVEL_TEMPERATURE_K / LAPSE_RATE_KPM * np.expm1(log_ratio / _PRESSURE_EXPONENT)
    log_ratio_above = np.log(_TROPOPAUSE_PRESSURE_PA / np.minimum(pressure, _TROPOPAUSE_PRESSURE_PA))
    return below_tropopause + _ISOTHERMAL_SCALE_HEIGHT_M * log_ratio_above


def geopotential_from_geometric_altitude(geometric_altitude_m: ArrayLike) -> FloatArray:
    """Geopotential altitude [m] of a geometric one [m], by the nominal earth radius of [1]."""
    geometric = _within_earth_radius(geometric_altitude_m)
    return geometric / (1.0 + geometric / EARTH_RADIUS_M)


def geometric_from_geopotential_altitude(geopotential_altitude_m: ArrayLike) -> FloatArray:
    """Geometric altitude [m] of a geopotential one [m], by the nominal earth radius of [1]."""
    geopotential = _within_earth_radius(geopotential_altitude_m)
    return geopotential / (1.0 - geopotential / EARTH_RADIUS_M)


def dry_air_density_from_pressure(static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike) -> FloatArray:
    """Density of dry air as an ideal gas. [kg/m3] For moist air: `service.airdata.humidity.air_density_from_pressure`.

    Parameters
    ----------
    static_pressure_pa, air_temperature_k : (n,) float [Pa], [K]; NaN where either is not above zero.
    """
    with np.errstate(over="ignore"):
        return _positive(static_pressure_pa) / (GAS_CONSTANT_DRY_AIR * _positive(air_temperature_k))


def speed_of_sound_from_temperature(air_temperature_k: ArrayLike) -> FloatArray:
    """Speed of sound in dry air. [m/s] NaN where the temperature [K] is not above zero."""
    # relative to sea level, so that a stands to the sea-level constant exactly as sqrt(T) to sqrt(T0)
    return SEA_LEVEL_SPEED_OF_SOUND_MPS * np.sqrt(_positive(air_temperature_k) / SEA_LEVEL_TEMPERATURE_K)


def dynamic_viscosity_from_temperature(air_temperature_k: ArrayLike) -> FloatArray:
    """Dynamic viscosity of air by Sutherland's formula. [Pa s] NaN where the temperature [K] is not above zero. [1]"""
    temperature = _positive(air_temperature_k)
    return SUTHERLAND_COEFFICIENT * np.sqrt(temperature) * (temperature / (temperature + SUTHERLAND_TEMPERATURE_K))


def _within_range(geopotential_altitude_m: ArrayLike) -> FloatArray:
    altitude = np.asarray(geopotential_altitude_m, dtype=np.float64)
    return np.where((altitude >= LOWEST_ALTITUDE_M) & (altitude <= HIGHEST_ALTITUDE_M), altitude, np.nan)


def _within_earth_radius(altitude_m: ArrayLike) -> FloatArray:
    altitude = np.asarray(altitude_m, dtype=np.float64)
    return np.where(np.abs(altitude) < EARTH_RADIUS_M, altitude, np.nan)


def _positive(quantity: ArrayLike) -> FloatArray:
    values = np.asarray(quantity, dtype=np.float64)
    return np.where((values > 0.0) & (values < np.inf), values, np.nan)


# computed by the same function as the pressures they bound, so that the ends of the range round-trip
_HIGHEST_PRESSURE_PA: Final = float(standard_pressure_from_altitude(LOWEST_ALTITUDE_M))
_TROPOPAUSE_PRESSURE_PA: Final = float(standard_pressure_from_altitude(TROPOPAUSE_ALTITUDE_M))
_LOWEST_PRESSURE_PA: Final = float(standard_pressure_from_altitude(HIGHEST_ALTITUDE_M))

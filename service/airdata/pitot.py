"""Subsonic pitot relations: impact pressure, Mach number, and calibrated, equivalent and true airspeed, both ways.

Isentropic flow of dry air with a heat capacity ratio of 1.4, up to but not including Mach 1, in forms that keep full
precision at the smallest pressures (no 1 + x - 1). Forward and inverse functions share their constants, so a round
trip returns within 1e-12. In moist air give the virtual temperature (`service.airdata.humidity`) as air temperature.

Rules that all functions keep, without raising a warning:

- NaN stays NaN; NaN also where a pressure or temperature is not above zero, and at Mach 1 and beyond (calibrated
  airspeed: beyond the sea-level speed of sound), where another relation holds.
- An impact pressure below zero gives airspeed 0 and derivative 0: noise about zero at rest is no fault, and no real
  root exists. Whoever must tell "0" from "below 0" looks at the sign of the pressure.
- A negative airspeed or Mach number gives NaN.
- Numbers or arrays that broadcast, as numpy's own ufuncs take them; the answer is float64 of the broadcast shape.

References
----------
[1] NACA Report 1135, Equations, tables, and charts for compressible flow (1953), isentropic relations.
[2] W. Gracey, Measurement of aircraft speed and altitude, NASA RP-1046 (1980), chapter on airspeed.
"""

from typing import Final

import numpy as np
from numpy.typing import ArrayLike

from service.airdata.atmosphere import speed_of_sound_from_temperature
from service.airdata.constants import (
    HEAT_CAPACITY_RATIO,
    SEA_LEVEL_PRESSURE_PA,
    SEA_LEVEL_SPEED_OF_SOUND_MPS,
)
from service.domain.arrays import FloatArray

_HALF_EXCESS: Final = (HEAT_CAPACITY_RATIO - 1.0) / 2.0
_PRESSURE_POWER: Final = HEAT_CAPACITY_RATIO / (HEAT_CAPACITY_RATIO - 1.0)
_SONIC_PRESSURE_RATIO: Final = float(np.expm1(_PRESSURE_POWER * np.log1p(_HALF_EXCESS)))
"""Impact over static pressure at Mach 1: 0.8929."""


# --- Mach number ----------------------------------------------------------------------------------------------------


def mach_from_impact_pressure(impact_pressure_pa: ArrayLike, static_pressure_pa: ArrayLike) -> FloatArray:
    """Mach number. [-]

    Parameters
    ----------
    impact_pressure_pa : (n,) float, total minus static pressure, corrected. [Pa]
    static_pressure_pa : (n,) float [Pa].

    References
    ----------
    [1] equation 44, solved for the Mach number.
    """
    return _mach_from_pressure_ratio(_subsonic_pressure_ratio(impact_pressure_pa, static_pressure_pa))


def impact_pressure_from_mach(mach: ArrayLike, static_pressure_pa: ArrayLike) -> FloatArray:
    """Impact pressure [Pa] at a Mach number [-] and static pressure [Pa]."""
    subsonic = _subsonic(mach)
    return _positive(static_pressure_pa) * np.expm1(_PRESSURE_POWER * np.log1p(_HALF_EXCESS * subsonic**2))


# --- calibrated airspeed: a function of impact pressure alone ---------------------------------------------------------


def calibrated_airspeed_from_impact_pressure(impact_pressure_pa: ArrayLike) -> FloatArray:
    """Calibrated airspeed [m/s]: the true airspeed of this impact pressure [Pa] in standard sea-level air. [2]"""
    return SEA_LEVEL_SPEED_OF_SOUND_MPS * mach_from_impact_pressure(impact_pressure_pa, SEA_LEVEL_PRESSURE_PA)


def impact_pressure_from_calibrated_airspeed(calibrated_airspeed_mps: ArrayLike) -> FloatArray:
    """Impact pressure [Pa] of a calibrated airspeed [m/s]. [2]"""
    sea_level_mach = np.asarray(calibrated_airspeed_mps, dtype=np.float64) / SEA_LEVEL_SPEED_OF_SOUND_MPS
    return impact_pressure_from_mach(sea_level_mach, SEA_LEVEL_PRESSURE_PA)


def mach_from_calibrated_airspeed(calibrated_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike) -> FloatArray:
    """Mach number [-] of a calibrated airspeed [m/s] at a static pressure [Pa]."""
    impact_pressure = impact_pressure_from_calibrated_airspeed(calibrated_airspeed_mps)
    return mach_from_impact_pressure(impact_pressure, static_pressure_pa)


def calibrated_airspeed_from_mach(mach: ArrayLike, static_pressure_pa: ArrayLike) -> FloatArray:
    """Calibrated airspeed [m/s] of a Mach number [-] at a static pressure [Pa]."""
    return calibrated_airspeed_from_impact_pressure(impact_pressure_from_mach(mach, static_pressure_pa))


# --- true airspeed: the only one that needs the temperature -----------------------------------------------------------


def true_airspeed_from_mach(mach: ArrayLike, air_temperature_k: ArrayLike) -> FloatArray:
    """True airspeed [m/s] of a Mach number [-] at a static air temperature [K]."""
    return _subsonic(mach) * speed_of_sound_from_temperature(air_temperature_k)


def mach_from_true_airspeed(true_airspeed_mps: ArrayLike, air_temperature_k: ArrayLike) -> FloatArray:
    """Mach number [-] of a true airspeed [m/s] at a static air temperature [K]."""
    return _subsonic(_quotient(true_airspeed_mps, speed_of_sound_from_temperature(air_temperature_k)))


def true_airspeed_from_impact_pressure(
    impact_pressure_pa: ArrayLike, static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike
) -> FloatArray:
    """True airspeed. [m/s]

    Parameters
    ----------
    impact_pressure_pa : (n,) float, total minus static pressure, corrected. [Pa]
    static_pressure_pa : (n,) float [Pa].
    air_temperature_k : (n,) float, of the undisturbed air; the virtual temperature where the air is moist. [K]
    """
    mach = mach_from_impact_pressure(impact_pressure_pa, static_pressure_pa)
    return mach * speed_of_sound_from_temperature(air_temperature_k)


def impact_pressure_from_true_airspeed(
    true_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike
) -> FloatArray:
    """Impact pressure [Pa] of a true airspeed [m/s] at a static pressure [Pa] and air temperature [K]."""
    return impact_pressure_from_mach(mach_from_true_airspeed(true_airspeed_mps, air_temperature_k), static_pressure_pa)


def true_from_calibrated_airspeed(
    calibrated_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike
) -> FloatArray:
    """True airspeed [m/s] of a calibrated one [m/s] at a static pressure [Pa] and air temperature [K]."""
    mach = mach_from_calibrated_airspeed(calibrated_airspeed_mps, static_pressure_pa)
    return mach * speed_of_sound_from_temperature(air_temperature_k)


def calibrated_from_true_airspeed(
    true_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike
) -> FloatArray:
    """Calibrated airspeed [m/s] of a true one [m/s] at a static pressure [Pa] and air temperature [K]."""
    return calibrated_airspeed_from_impact_pressure(
        impact_pressure_from_true_airspeed(true_airspeed_mps, static_pressure_pa, air_temperature_k)
    )


# --- equivalent airspeed: true airspeed times sqrt(density / sea-level density) = a0 Mach sqrt(p / p0) ----------------


def equivalent_airspeed_from_mach(mach: ArrayLike, static_pressure_pa: ArrayLike) -> FloatArray:
    """Equivalent airspeed [m/s] of a Mach number [-] at a static pressure [Pa]; the temperature cancels."""
    return _subsonic(mach) * _equivalent_speed_of_sound(static_pressure_pa)


def mach_from_equivalent_airspeed(equivalent_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike) -> FloatArray:
    """Mach number [-] of an equivalent airspeed [m/s] at a static pressure [Pa]."""
    return _subsonic(_quotient(equivalent_airspeed_mps, _equivalent_speed_of_sound(static_pressure_pa)))


def equivalent_airspeed_from_impact_pressure(
    impact_pressure_pa: ArrayLike, static_pressure_pa: ArrayLike
) -> FloatArray:
    """Equivalent airspeed [m/s] of an impact pressure [Pa] at a static pressure [Pa]."""
    mach = mach_from_impact_pressure(impact_pressure_pa, static_pressure_pa)
    return mach * _equivalent_speed_of_sound(static_pressure_pa)


def impact_pressure_from_equivalent_airspeed(
    equivalent_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike
) -> FloatArray:
    """Impact pressure [Pa] of an equivalent airspeed [m/s] at a static pressure [Pa]."""
    mach = mach_from_equivalent_airspeed(equivalent_airspeed_mps, static_pressure_pa)
    return impact_pressure_from_mach(mach, static_pressure_pa)


def equivalent_from_calibrated_airspeed(
    calibrated_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike
) -> FloatArray:
    """Equivalent airspeed [m/s] of a calibrated one [m/s] at a static pressure [Pa]."""
    mach = mach_from_calibrated_airspeed(calibrated_airspeed_mps, static_pressure_pa)
    return mach * _equivalent_speed_of_sound(static_pressure_pa)


def calibrated_from_equivalent_airspeed(
    equivalent_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike
) -> FloatArray:
    """Calibrated airspeed [m/s] of an equivalent one [m/s] at a static pressure [Pa]."""
    return calibrated_airspeed_from_impact_pressure(
        impact_pressure_from_equivalent_airspeed(equivalent_airspeed_mps, static_pressure_pa)
    )


def equivalent_from_true_airspeed(
    true_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike
) -> FloatArray:
    """Equivalent airspeed [m/s] of a true one [m/s] at a static pressure [Pa] and air temperature [K]."""
    mach = mach_from_true_airspeed(true_airspeed_mps, air_temperature_k)
    return mach * _equivalent_speed_of_sound(static_pressure_pa)


def true_from_equivalent_airspeed(
    equivalent_airspeed_mps: ArrayLike, static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike
) -> FloatArray:
    """True airspeed [m/s] of an equivalent one [m/s] at a static pressure [Pa] and air temperature [K]."""
    mach = mach_from_equivalent_airspeed(equivalent_airspeed_mps, static_pressure_pa)
    return mach * speed_of_sound_from_temperature(air_temperature_k)


# --- derivatives, for Jacobians and uncertainties ---------------------------------------------------------------------


def true_airspeed_slope(
    impact_pressure_pa: ArrayLike, static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike
) -> FloatArray:
    """Derivative of true airspeed with respect to ln(impact pressure). [m/s]

    Half the airspeed at low speed, a little less at Mach number M (by the factor 1 - M^2/4), and 0 where the impact
    pressure is not above zero. It is also the derivative with respect to ln(pressure scale), and minus that with
    respect to ln(static pressure); with respect to ln(temperature) the derivative is half the airspeed. Over the
    impact pressure it is the derivative with respect to that, without bound toward zero: an uncertainty of pressure
    is then no longer small, and must not be carried by a derivative.

    Parameters
    ----------
    impact_pressure_pa, static_pressure_pa, air_temperature_k : (n,) float [Pa], [Pa], [K].
    """
    mach_slope = _mach_slope(_subsonic_pressure_ratio(impact_pressure_pa, static_pressure_pa))
    return mach_slope * speed_of_sound_from_temperature(air_temperature_k)


def calibrated_airspeed_slope(impact_pressure_pa: ArrayLike) -> FloatArray:
    """Derivative of calibrated airspeed with respect to ln(impact pressure). [m/s] See `true_airspeed_slope`."""
    return SEA_LEVEL_SPEED_OF_SOUND_MPS * _mach_slope(
        _subsonic_pressure_ratio(impact_pressure_pa, SEA_LEVEL_PRESSURE_PA)
    )


# --- shared parts -----------------------------------------------------------------------------------------------------


def _subsonic_pressure_ratio(impact_pressure_pa: ArrayLike, static_pressure_pa: ArrayLike) -> FloatArray:
    """Impact over static pressure: 0 where negative, NaN from Mach 1 on."""
    ratio = np.maximum(_quotient(impact_pressure_pa, _positive(static_pressure_pa)), 0.0)
    return np.where(ratio < _SONIC_PRESSURE_RATIO, ratio, np.nan)


def _mach_from_pressure_ratio(ratio: FloatArray) -> FloatArray:
    return np.sqrt(np.expm1(np.log1p(ratio) / _PRESSURE_POWER) / _HALF_EXCESS)


def _mach_slope(ratio: FloatArray) -> FloatArray:
    """Derivative of the Mach number with respect to ln(ratio); its limit 0 at ratio 0."""
    mach = _mach_from_pressure_ratio(ratio)
    divisor = HEAT_CAPACITY_RATIO * np.where(mach == 0.0, 1.0, mach)
    return ratio * np.exp(-np.log1p(ratio) / HEAT_CAPACITY_RATIO) / divisor


def _equivalent_speed_of_sound(static_pressure_pa: ArrayLike) -> FloatArray:
    return SEA_LEVEL_SPEED_OF_SOUND_MPS * np.sqrt(_positive(static_pressure_pa) / SEA_LEVEL_PRESSURE_PA)


def _subsonic(mach: ArrayLike) -> FloatArray:
    values = np.asarray(mach, dtype=np.float64)
    return np.where((values >= 0.0) & (values < 1.0), values, np.nan)


def _positive(pressure_pa: ArrayLike) -> FloatArray:
    values = np.asarray(pressure_pa, dtype=np.float64)
    return np.where((values > 0.0) & (values < np.inf), values, np.nan)


def _quotient(numerator: ArrayLike, divisor: FloatArray) -> FloatArray:
    # a quotient too large to hold is infinite, hence beyond Mach 1 and NaN: nothing to warn of
    with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
        return np.asarray(numerator, dtype=np.float64) / divisor

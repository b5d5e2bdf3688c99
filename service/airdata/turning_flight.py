"""Level coordinated turns, and stall speed at load factor and mass.

Airspeed in a turn is the **true** one; stall speeds are calibrated (or equivalent, the same at low speed). Bank and
turn rate are positive to the right; load factors and radii have no side. NaN stays NaN, no warning is raised. Numbers
or arrays that broadcast, as numpy's own ufuncs take them; the answer is float64.

References
----------
[1] FAA-H-8083-3, Airplane Flying Handbook: load factor = 1 / cos(bank), stall speed grows with its square root.
"""

import numpy as np
from numpy.typing import ArrayLike

from service.airdata.constants import SEA_LEVEL_DENSITY_KGPM3, STANDARD_GRAVITY_MPS2
from service.domain.arrays import FloatArray

# infinite radii, and numbers too large to multiply, are answers here and no cause to warn
_quiet = np.errstate(divide="ignore", over="ignore", invalid="ignore")


@_quiet
def load_factor_from_bank(bank_deg: ArrayLike) -> FloatArray:
    """Load factor [-] of a level coordinated turn at a bank [deg]; NaN from 90 degrees on. [1]"""
    return 1.0 / np.cos(_bank_rad(bank_deg))


@_quiet
def load_factor_from_turn_rate(true_airspeed_mps: ArrayLike, turn_rate_dps: ArrayLike) -> FloatArray:
    """Load factor [-] of a level coordinated turn at a true airspeed [m/s] and rate of change of heading [deg/s]."""
    return np.hypot(1.0, _centripetal_load(true_airspeed_mps, turn_rate_dps))


@_quiet
def bank_from_turn_rate(true_airspeed_mps: ArrayLike, turn_rate_dps: ArrayLike) -> FloatArray:
    """Bank [deg] of a level coordinated turn at a true airspeed [m/s] and rate of change of heading [deg/s]."""
    return np.rad2deg(np.arctan(_centripetal_load(true_airspeed_mps, turn_rate_dps)))


@_quiet
def bank_from_load_factor(load_factor: ArrayLike) -> FloatArray:
    """Bank [deg], 0 to 90, of a level coordinated turn at a load factor [-]; NaN below 1."""
    factor = np.asarray(load_factor, dtype=np.float64)
    return np.rad2deg(np.arccos(1.0 / np.where(factor >= 1.0, factor, np.nan)))


@_quiet
def turn_rate_from_bank(true_airspeed_mps: ArrayLike, bank_deg: ArrayLike) -> FloatArray:
    """Rate of change of heading [deg/s] at a true airspeed [m/s] and bank [deg]; NaN at no airspeed."""
    return np.rad2deg(STANDARD_GRAVITY_MPS2 * np.tan(_bank_rad(bank_deg)) / _positive(true_airspeed_mps))


@_quiet
def turn_radius_from_bank(true_airspeed_mps: ArrayLike, bank_deg: ArrayLike) -> FloatArray:
    """Radius [m], through the air, of a turn at a true airspeed [m/s] and bank [deg]; infinite wings level."""
    tangent = np.abs(np.tan(_bank_rad(bank_deg)))
    return _positive(true_airspeed_mps) ** 2 / (STANDARD_GRAVITY_MPS2 * tangent)


@_quiet
def turn_radius_from_turn_rate(true_airspeed_mps: ArrayLike, turn_rate_dps: ArrayLike) -> FloatArray:
    """Radius [m], through the air, of a turn at a true airspeed [m/s] and rate [deg/s]; infinite on a straight path."""
    return _positive(true_airspeed_mps) / np.abs(np.deg2rad(np.asarray(turn_rate_dps, dtype=np.float64)))


@_quiet
def stall_speed_at_load_factor(
    stall_speed_mps: ArrayLike, load_factor: ArrayLike, mass_ratio: ArrayLike = 1.0
) -> FloatArray:
    """Stall speed in the actual flight condition. [m/s] The given one times sqrt(load factor x mass ratio). [1]

    Zero at load factor 0; NaN below, where the wing lifts downwards and the stall speed given says nothing.

    Parameters
    ----------
    stall_speed_mps : (n,) float, CAS at load factor 1 and the reference mass. [m/s]
    load_factor : (n,) float, normal to the wing, 1 in level flight. [-]
    mass_ratio : (n,) float, actual over reference mass. [-]
    """
    # the root of a negative load is NaN, as it should be
    root = np.sqrt(np.asarray(load_factor, dtype=np.float64) * _positive(mass_ratio))
    return np.asarray(stall_speed_mps, dtype=np.float64) * root


@_quiet
def stall_speed_from_wing(mass_kg: ArrayLike, wing_area_m2: ArrayLike, lift_coefficient_max: ArrayLike) -> FloatArray:
    """Stall speed at load factor 1. [m/s] From lift = weight at the greatest lift coefficient in sea-level density.

    That is an equivalent airspeed; at stall speeds of small aircraft it differs from the calibrated one by less than
    2 parts in 10,000 up to 1500 m.

    Parameters
    ----------
    mass_kg, wing_area_m2, lift_coefficient_max : (n,) float [kg], [m2], [-]; NaN where one is not above zero.
    """
    lift_area = _positive(wing_area_m2) * _positive(lift_coefficient_max)
    weight_n = _positive(mass_kg) * STANDARD_GRAVITY_MPS2
    return np.sqrt(2.0 * weight_n / (SEA_LEVEL_DENSITY_KGPM3 * lift_area))


def _centripetal_load(true_airspeed_mps: ArrayLike, turn_rate_dps: ArrayLike) -> FloatArray:
    """Centripetal acceleration in units of gravity: tangent of the bank, right positive. [-]"""
    turn_rate_radps = np.deg2rad(np.asarray(turn_rate_dps, dtype=np.float64))
    return np.asarray(true_airspeed_mps, dtype=np.float64) * turn_rate_radps / STANDARD_GRAVITY_MPS2


def _bank_rad(bank_deg: ArrayLike) -> FloatArray:
    bank = np.asarray(bank_deg, dtype=np.float64)
    return np.deg2rad(np.where(np.abs(bank) < 90.0, bank, np.nan))


def _positive(quantity: ArrayLike) -> FloatArray:
    values = np.asarray(quantity, dtype=np.float64)
    return np.where((values > 0.0) & (values < np.inf), values, np.nan)

"""Stall margins: calibrated airspeed over the stall speed at the actual load factor and mass, less one.

Stall speed
-----------
`Vs = Vs1 sqrt(n m / m_ref)`, all CAS [1]; Vs1 as given (at load factor 1 and the reference mass) or from wing area,
greatest lift coefficient and mass. Without both masses the stall speed given is taken for the mass flown. The load
factor enters as `max(|n|, 0.1)`: a wing pushed downward stalls too, and a push-over through zero lasts a moment, in
which an endless margin would be no comfort.

What the user does not say is assumed, wide rather than narrow (standard uncertainties): 3 % of a given stall speed, the
error that certification allows the airspeed system it was measured with [2]; 5 % of one from the greatest lift
coefficient, which is hardly known better than 10 %; 2 % of a mass.

Lower bound
-----------
The margin is a ratio of two uncertain speeds. Its 2.5 % point r solves `V - r Vs = z u(V - r Vs)` (Fieller's
construction [3]), exact for normal errors of both and free of the bias that a normal or a lognormal law for the ratio
itself would bring when either is poorly known. With U = z u, half the width of a 95 % interval, it has a closed form:

    r = (V^2 - U_V^2) / (V Vs + sqrt(V^2 U_s^2 + Vs^2 U_V^2 - U_V^2 U_s^2)),

and r = 0 where airspeed itself may be zero. z is 1.96 for the stall speed, the fit's own coverage factor for airspeed.

Margins are NaN on the ground, without a calibration, and where the reading is missing or faulty.

References
----------
[1] FAA-H-8083-3, Airplane Flying Handbook.
[2] 14 CFR 23.1323(b) and SFAR 23 section 13(c): 3 % or 5 kt, whichever is greater.
[3] E. C. Fieller, Some problems in interval estimation, J. R. Stat. Soc. B 16 (1954) 175-185.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from service.airdata.turning_flight import stall_speed_at_load_factor, stall_speed_from_wing
from service.domain.arrays import FloatArray, IntArray
from service.domain.codes import Flag
from service.domain.results import CorrectedSeries, LoadFactorSeries, StallMargins
from service.domain.settings import Aircraft, Configuration

NORMAL_COVERAGE_95: Final = 1.959964
SMALLEST_LOAD_FACTOR: Final = 0.1
STALL_SPEED_UNCERTAINTY: Final = 0.03
"""Of a given stall speed without an uncertainty. [relative]"""
WING_STALL_SPEED_UNCERTAINTY: Final = 0.05
"""Of a stall speed from the greatest lift coefficient. [relative]"""
MASS_UNCERTAINTY: Final = 0.02
"""Of a mass without an uncertainty. [relative]"""
SILENT: Final = Flag.ON_GROUND | Flag.UNCALIBRATED | Flag.MISSING | Flag.FAULTY
"""Samples with any of these have no margin."""


@dataclass(frozen=True, slots=True)
class LevelStallSpeeds:
    """Stall speed at load factor 1 and the actual mass, per configuration, each (c,); NaN where unknown. [m/s]"""

    speed_mps: FloatArray
    standard_uncertainty_mps: FloatArray


def stall_margins(
    corrected: CorrectedSeries,
    load_factor: LoadFactorSeries,
    aircraft: Aircraft,
    in_force: IntArray,
    coverage_factor_95: float = NORMAL_COVERAGE_95,
) -> tuple[StallMargins | None, str | None]:
    """Margins of every sample, or None and a sentence that says why there are none.

    Parameters
    ----------
    corrected, load_factor : n samples each.
    in_force : (n,) index of the configuration in force at each sample.
    coverage_factor_95 : half width of a 95 % interval of airspeed over its standard uncertainty; the fit's.
    """
    level = level_stall_speeds(aircraft)
    if not np.isfinite(level.speed_mps).any():
        return None, _reason(aircraft)
    carried = np.maximum(np.abs(load_factor.load_factor), SMALLEST_LOAD_FACTOR)
    speed = stall_speed_at_load_factor(level.speed_mps[in_force], carried)
    relative = (level.standard_uncertainty_mps / level.speed_mps)[in_force]
    uncertainty = speed * np.hypot(relative, 0.5 * load_factor.standard_uncertainty / carried)
    silent = (corrected.flags & np.uint32(SILENT)) != 0
    airspeed = np.where(silent, np.nan, corrected.calibrated_mps)
    lowest = lowest_ratio_95(
        airspeed,
        coverage_factor_95 * corrected.calibrated_standard_uncertainty_mps,
        speed,
        NORMAL_COVERAGE_95 * uncertainty,
    )
    unknown = np.isnan(load_factor.load_factor) | load_factor.assumed
    margins = StallMargins(
        time_s=corrected.time_s,
        load_factor=load_factor.load_factor,
        stall_speed_mps=speed,
        margin=airspeed / speed - 1.0,
        margin_lower_95=lowest - 1.0,
        indicated_margin=np.where(silent, np.nan, corrected.indicated_mps) / speed - 1.0,
        flags=corrected.flags | np.where(unknown, np.uint32(Flag.NO_LOAD_FACTOR), np.uint32(0)),
        load_factor_source=load_factor.source,
    )
    return margins, None


def level_stall_speeds(aircraft: Aircraft) -> LevelStallSpeeds:
    """Stall speed of each configuration of `aircraft` at load factor 1 and the mass flown."""
    pairs = [_level_stall_speed(configuration, aircraft) for configuration in aircraft.configurations]
    speeds = np.array(pairs, dtype=np.float64).reshape(-1, 2)
    return LevelStallSpeeds(speeds[:, 0], speeds[:, 1])


def lowest_ratio_95(
    numerator: FloatArray, numerator_half_width: FloatArray, divisor: FloatArray, divisor_half_width: FloatArray
) -> FloatArray:
    """2.5 % point of numerator / divisor, both above zero, from the half widths of their 95 % intervals. [3]

    Parameters
    ----------
    numerator, numerator_half_width, divisor, divisor_half_width : (n,) float, one unit.

    Returns
    -------
    (n,) float ; 0 where the numerator's interval reaches zero.
    """
    above_zero = np.maximum((numerator - numerator_half_width) * (numerator + numerator_half_width), 0.0)
    crossed = (divisor * numerator_half_width) ** 2 + above_zero * divisor_half_width**2
    below = numerator * divisor + np.sqrt(crossed)
    lowest: FloatArray = above_zero / np.where(below == 0.0, 1.0, below)
    return lowest


def _level_stall_speed(configuration: Configuration, aircraft: Aircraft) -> tuple[float, float]:
    """Speed and standard uncertainty; NaN where the settings do not hold one. [m/s]"""
    given_mps = _above_zero(configuration.stall_speed_mps)
    if given_mps is not None:
        return _from_given_speed(given_mps, configuration, aircraft)
    area_m2, coefficient = _above_zero(configuration.wing_area_m2), _above_zero(configuration.lift_coefficient_max)
    mass_kg = _above_zero(aircraft.mass_kg) or _above_zero(aircraft.reference_mass_kg)
    if mass_kg is None or area_m2 is None or coefficient is None:
        return np.nan, np.nan
    speed = float(stall_speed_from_wing(mass_kg, area_m2, coefficient))
    own = configuration.stall_speed_uncertainty_mps
    own = WING_STALL_SPEED_UNCERTAINTY * speed if own is None else own
    return speed, float(np.hypot(own, 0.5 * speed * _mass_uncertainty(aircraft, mass_kg)))


def _from_given_speed(speed_mps: float, configuration: Configuration, aircraft: Aircraft) -> tuple[float, float]:
    own = configuration.stall_speed_uncertainty_mps
    relative = STALL_SPEED_UNCERTAINTY if own is None else own / speed_mps
    mass_kg, reference_kg = _above_zero(aircraft.mass_kg), _above_zero(aircraft.reference_mass_kg)
    if mass_kg is None or reference_kg is None:
        return speed_mps, relative * speed_mps
    at_mass = float(stall_speed_at_load_factor(speed_mps, 1.0, mass_kg / reference_kg))
    return at_mass, at_mass * float(np.hypot(relative, 0.5 * _mass_uncertainty(aircraft, mass_kg)))


def _above_zero(value: float | None) -> float | None:
    return value if value is not None and value > 0.0 else None


def _mass_uncertainty(aircraft: Aircraft, mass_kg: float) -> float:
    """Relative standard uncertainty of the mass flown."""
    return MASS_UNCERTAINTY if aircraft.mass_uncertainty_kg is None else aircraft.mass_uncertainty_kg / mass_kg


def _reason(aircraft: Aircraft) -> str:
    if not aircraft.configurations:
        return "No stall margins: the settings name no configuration with a stall speed."
    return (
        "No stall margins: no configuration has a stall speed, "
        "nor wing area, greatest lift coefficient and a mass to find one from."
    )

"""Moist air: vapour pressure, virtual temperature and density.

The service uses the **ideal moist gas**: vapour pressure as in CIPM-2007, the gas law without its compressibility
factor. At humidity 0 it equals the dry relations exactly. The full CIPM-2007 formula is here as well
(`cipm_2007_air_density`), as the measure of that choice: the ideal gas is lighter by 0.05 % at 15 degrees Celsius and
0.12 % at -30, half of that in airspeed.

Humidity acts on true airspeed alone, as 1 / sqrt(density): +0.16 % at 15 degrees and half saturation, +0.85 % at 35
degrees and 80 %. All of it is carried by the **virtual temperature**, that of dry air which is as light, given to the
relations of `service.airdata.pitot` in place of the air temperature. The vapour also lowers the heat capacity ratio (to
1.396 at 35 degrees and 80 %); at equal density this changes the airspeed only through compressibility, by 3e-5 at
100 m/s and less below, and is neglected.

Outside the range that CIPM-2007 claims (15 to 27 degrees, 600 to 1100 hPa) the vapour pressure is extrapolated, and it
is taken over water also below freezing, where saturated air is at most 0.23 % lighter than dry and the choice
matters little. Humidity outside 0 to 1, temperatures outside -80 to 60 degrees, and NaN give NaN; no warning is raised.
Numbers or arrays that broadcast, as numpy's own ufuncs take them; the answer is float64.

References
----------
[1] A. Picard et al., Revised formula for the density of moist air (CIPM-2007), Metrologia 45 (2008) 149-155.
"""

import numpy as np
from numpy.typing import ArrayLike

from service.airdata.atmosphere import dry_air_density_from_pressure
from service.airdata.constants import (
    COMPRESSIBILITY_A,
    COMPRESSIBILITY_B,
    COMPRESSIBILITY_C,
    COMPRESSIBILITY_D,
    COMPRESSIBILITY_E,
    DRY_AIR_MOLAR_MASS_KGPMOL,
    ENHANCEMENT_COEFFICIENTS,
    MOLAR_GAS_CONSTANT,
    SATURATION_PRESSURE_COEFFICIENTS,
    VAPOUR_FORMULA_RANGE_K,
    VAPOUR_MASS_DEFICIT,
    ZERO_CELSIUS_K,
)
from service.domain.arrays import FloatArray


def saturation_vapour_pressure_from_temperature(air_temperature_k: ArrayLike) -> FloatArray:
    """Saturation pressure of water vapour over water. [Pa]

    Parameters
    ----------
    air_temperature_k : (n,) float [K], 193.15 to 333.15; else NaN.

    References
    ----------
    [1] appendix A1.1.
    """
    temperature = _computable_temperature(air_temperature_k)
    quadratic, linear, constant, inverse = SATURATION_PRESSURE_COEFFICIENTS
    return np.exp(quadratic * temperature**2 + linear * temperature + constant + inverse / temperature)


def vapour_mole_fraction_from_humidity(
    static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike, relative_humidity: ArrayLike
) -> FloatArray:
    """Mole fraction of water vapour in the air. [-]

    NaN where the vapour would have to bear more than half of the pressure (no air of ours).

    Parameters
    ----------
    static_pressure_pa, air_temperature_k : (n,) float [Pa], [K].
    relative_humidity : (n,) float, 0 to 1; else NaN. [-]

    References
    ----------
    [1] appendix A1.1 and A1.2.
    """
    pressure = _positive(static_pressure_pa)
    alpha, beta, gamma = ENHANCEMENT_COEFFICIENTS
    celsius = _computable_temperature(air_temperature_k) - ZERO_CELSIUS_K
    enhancement = alpha + beta * pressure + gamma * celsius**2
    vapour_pressure = _fraction(relative_humidity) * saturation_vapour_pressure_from_temperature(air_temperature_k)
    bearable = np.where(enhancement * vapour_pressure <= 0.5 * pressure, pressure, np.nan)
    return enhancement * vapour_pressure / bearable


def virtual_temperature_from_humidity(
    static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike, relative_humidity: ArrayLike
) -> FloatArray:
    """Virtual temperature. [K] That of dry air of the same pressure and density; the air temperature at humidity 0.

    Parameters
    ----------
    static_pressure_pa, air_temperature_k : (n,) float [Pa], [K].
    relative_humidity : (n,) float, 0 to 1; else NaN. [-]
    """
    vapour = vapour_mole_fraction_from_humidity(static_pressure_pa, air_temperature_k, relative_humidity)
    return _computable_temperature(air_temperature_k) / (1.0 - VAPOUR_MASS_DEFICIT * vapour)


def air_density_from_pressure(
    static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike, relative_humidity: ArrayLike | None = None
) -> FloatArray:
    """Density of air as an ideal gas, dry when no humidity is given. [kg/m3]

    Parameters
    ----------
    static_pressure_pa, air_temperature_k : (n,) float [Pa], [K].
    relative_humidity : (n,) float, 0 to 1 [-]; NaN stays NaN: whether a gap means dry air is the caller's to say.
    """
    if relative_humidity is None:
        return dry_air_density_from_pressure(static_pressure_pa, air_temperature_k)
    virtual = virtual_temperature_from_humidity(static_pressure_pa, air_temperature_k, relative_humidity)
    return dry_air_density_from_pressure(static_pressure_pa, virtual)


def cipm_2007_air_density(
    static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike, relative_humidity: ArrayLike
) -> FloatArray:
    """Density of moist real air with 400 ppm of carbon dioxide. [kg/m3]

    Parameters
    ----------
    static_pressure_pa, air_temperature_k : (n,) float [Pa], [K].
    relative_humidity : (n,) float, 0 to 1; else NaN. [-]

    References
    ----------
    [1] equation 1.
    """
    vapour = vapour_mole_fraction_from_humidity(static_pressure_pa, air_temperature_k, relative_humidity)
    compressibility = _cipm_2007_compressibility(static_pressure_pa, air_temperature_k, vapour)
    molar_mass = DRY_AIR_MOLAR_MASS_KGPMOL * (1.0 - VAPOUR_MASS_DEFICIT * vapour)
    molar_volume = compressibility * MOLAR_GAS_CONSTANT * _computable_temperature(air_temperature_k)
    return molar_mass * _positive(static_pressure_pa) / molar_volume


def _cipm_2007_compressibility(
    static_pressure_pa: ArrayLike, air_temperature_k: ArrayLike, vapour: FloatArray
) -> FloatArray:
    """Compressibility factor of moist air, [1] appendix A1.3. [-]"""
    temperature = _computable_temperature(air_temperature_k)
    celsius = temperature - ZERO_CELSIUS_K
    pressure_over_temperature = _positive(static_pressure_pa) / temperature
    dry = COMPRESSIBILITY_A[0] + COMPRESSIBILITY_A[1] * celsius + COMPRESSIBILITY_A[2] * celsius**2
    mixed = (COMPRESSIBILITY_B[0] + COMPRESSIBILITY_B[1] * celsius) * vapour
    wet = (COMPRESSIBILITY_C[0] + COMPRESSIBILITY_C[1] * celsius) * vapour**2
    second_order = COMPRESSIBILITY_D + COMPRESSIBILITY_E * vapour**2
    return 1.0 - pressure_over_temperature * (dry + mixed + wet) + pressure_over_temperature**2 * second_order


def _computable_temperature(air_temperature_k: ArrayLike) -> FloatArray:
    temperature = np.asarray(air_temperature_k, dtype=np.float64)
    coldest, warmest = VAPOUR_FORMULA_RANGE_K
    return np.where((temperature >= coldest) & (temperature <= warmest), temperature, np.nan)


def _fraction(relative_humidity: ArrayLike) -> FloatArray:
    values = np.asarray(relative_humidity, dtype=np.float64)
    return np.where((values >= 0.0) & (values <= 1.0), values, np.nan)


def _positive(pressure_pa: ArrayLike) -> FloatArray:
    # up to ten times sea level: the formula squares the pressure, and no air of ours bears more
    values = np.asarray(pressure_pa, dtype=np.float64)
    return np.where((values > 0.0) & (values < 1e6), values, np.nan)

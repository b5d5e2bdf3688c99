"""The one place of constants of air data. Each has its unit in its name or beside it, and its source.

Sources
-------
[1] ISO 2533:1975, Standard atmosphere; ICAO Doc 7488/3, Manual of the ICAO Standard Atmosphere (the same values).
[2] US Standard Atmosphere, 1976, NOAA-S/T 76-1562.
[3] A. Picard et al., Revised formula for the density of moist air (CIPM-2007), Metrologia 45 (2008) 149-155.
[4] BIPM, The International System of Units, 9th edition (2019).
"""

from typing import Final

# --- standard atmosphere -----------------------------------------------------------------------------------------

STANDARD_GRAVITY_MPS2: Final = 9.80665
"""[m/s2] [1]; also the unit of load factor."""

GAS_CONSTANT_DRY_AIR: Final = 287.05287
"""Specific gas constant of dry air. [J/(kg K)] [1]; the tables of [2] follow 287.053, 0.8 parts per million below."""

HEAT_CAPACITY_RATIO: Final = 1.4
"""Of dry air. [-] [1]"""

SEA_LEVEL_TEMPERATURE_K: Final = 288.15
"""[K] [1]"""

SEA_LEVEL_PRESSURE_PA: Final = 101325.0
"""[Pa] [1]"""

SEA_LEVEL_DENSITY_KGPM3: Final = SEA_LEVEL_PRESSURE_PA / (GAS_CONSTANT_DRY_AIR * SEA_LEVEL_TEMPERATURE_K)
"""[kg/m3] Derived, so that pressure, density and temperature keep the gas law: 1.22500002, not the rounded 1.225."""

SEA_LEVEL_SPEED_OF_SOUND_MPS: Final = (HEAT_CAPACITY_RATIO * GAS_CONSTANT_DRY_AIR * SEA_LEVEL_TEMPERATURE_K) ** 0.5
"""[m/s] Derived: 340.293988."""

LAPSE_RATE_KPM: Final = -0.0065
"""Temperature gradient below the tropopause, by geopotential altitude. [K/m] [1]"""

LOWEST_ALTITUDE_M: Final = -5000.0
"""Geopotential altitude at which the tables of [1] begin. [m]"""

TROPOPAUSE_ALTITUDE_M: Final = 11000.0
"""Geopotential; the air is isothermal from here to the highest altitude. [m] [1]"""

HIGHEST_ALTITUDE_M: Final = 20000.0
"""Geopotential; top of the isothermal layer and of what this service computes. [m] [1]"""

EARTH_RADIUS_M: Final = 6356766.0
"""Nominal radius that relates geometric to geopotential altitude. [m] [1] [2]"""

SUTHERLAND_COEFFICIENT: Final = 1.458e-6
"""Of the dynamic viscosity of air. [kg/(m s K^0.5)] [1] [2]"""

SUTHERLAND_TEMPERATURE_K: Final = 110.4
"""[K] [1] [2]"""

ZERO_CELSIUS_K: Final = 273.15
"""[K] [4]"""

# --- moist air, CIPM-2007 [3]: t is in degrees Celsius, T in kelvin, p in pascal -----------------------------------

MOLAR_GAS_CONSTANT: Final = 8.314472
"""As CIPM-2007 uses it. [J/(mol K)] [3]"""

DRY_AIR_MOLAR_MASS_KGPMOL: Final = 28.96546e-3
"""With 400 ppm of carbon dioxide. [kg/mol] [3]"""

WATER_MOLAR_MASS_KGPMOL: Final = 18.01528e-3
"""[kg/mol] [3]"""

VAPOUR_MASS_DEFICIT: Final = 1.0 - WATER_MOLAR_MASS_KGPMOL / DRY_AIR_MOLAR_MASS_KGPMOL
"""By how much vapour is lighter than dry air. [-] Derived; [3] prints it rounded as 0.3780."""

SATURATION_PRESSURE_COEFFICIENTS: Final = (1.2378847e-5, -1.9121316e-2, 33.93711047, -6343.1645)
"""ln(saturation pressure / Pa) = A T^2 + B T + C + D / T. [K^-2, K^-1, -, K] [3]"""

ENHANCEMENT_COEFFICIENTS: Final = (1.00062, 3.14e-8, 5.6e-7)
"""Enhancement factor of the saturation pressure = alpha + beta p + gamma t^2. [-, 1/Pa, K^-2] [3]"""

COMPRESSIBILITY_A: Final = (1.58123e-6, -2.9331e-8, 1.1043e-10)
"""Coefficients of t^0, t^1, t^2. [K/Pa, 1/Pa, 1/(K Pa)] [3]"""

COMPRESSIBILITY_B: Final = (5.707e-6, -2.051e-8)
"""Coefficients of t^0, t^1, times the mole fraction of vapour. [K/Pa, 1/Pa] [3]"""

COMPRESSIBILITY_C: Final = (1.9898e-4, -2.376e-6)
"""Coefficients of t^0, t^1, times its square. [K/Pa, 1/Pa] [3]"""

COMPRESSIBILITY_D: Final = 1.83e-11
"""[K2/Pa2] [3]"""

COMPRESSIBILITY_E: Final = -0.765e-8
"""Times the square of the mole fraction of vapour. [K2/Pa2] [3]"""

VAPOUR_FORMULA_RANGE_K: Final = (193.15, 333.15)
"""Air temperatures for which vapour is computed at all. [K] Own choice: the coldest and warmest air near the ground,
with margin. [3] itself claims 15 to 27 degrees Celsius; `service.airdata.humidity` says what is lost outside."""

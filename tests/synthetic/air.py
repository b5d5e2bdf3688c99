"""The simulated air: its own formulas, kept apart from the service's, so that one cannot hide an error of the other."""

from dataclasses import dataclass

import numpy as np

from service.domain.arrays import FloatArray

GRAVITY = 9.80665
"""[m/s2]"""
GAS_CONSTANT = 287.05287
"""Dry air, ISO 2533. [J/(kg K)]"""
HEAT_RATIO = 1.4
SEA_LEVEL_PRESSURE_PA = 101325.0
SEA_LEVEL_TEMPERATURE_K = 288.15
SEA_LEVEL_DENSITY = SEA_LEVEL_PRESSURE_PA / (GAS_CONSTANT * SEA_LEVEL_TEMPERATURE_K)
SEA_LEVEL_SOUND_MPS = float(np.sqrt(HEAT_RATIO * GAS_CONSTANT * SEA_LEVEL_TEMPERATURE_K))
LAPSE_K_PER_M = 0.0065


@dataclass(frozen=True, slots=True)
class Atmosphere:
    """A standard lapse rate over a ground whose temperature and pressure are off the standard."""

    ground_elevation_m: float
    temperature_offset_k: float
    pressure_offset_pa: float

    def temperature_k(self, height_m: FloatArray) -> FloatArray:
        """Air temperature at a height above the ground. [K]"""
        altitude_m = self.ground_elevation_m + np.asarray(height_m)
        return SEA_LEVEL_TEMPERATURE_K + self.temperature_offset_k - LAPSE_K_PER_M * altitude_m

    def pressure_pa(self, height_m: FloatArray) -> FloatArray:
        """Hydrostatic pressure at a height above the ground, in the air as warm as it is. [Pa]"""
        standard = 1.0 - LAPSE_K_PER_M * self.ground_elevation_m / SEA_LEVEL_TEMPERATURE_K
        exponent = GRAVITY / (GAS_CONSTANT * LAPSE_K_PER_M)
        ground_pa = SEA_LEVEL_PRESSURE_PA * standard**exponent + self.pressure_offset_pa
        ratio = self.temperature_k(height_m) / self.temperature_k(np.zeros(()))
        return np.asarray(ground_pa * ratio**exponent)

    def density(self, height_m: FloatArray) -> FloatArray:
        """[kg/m3]"""
        return self.pressure_pa(height_m) / (GAS_CONSTANT * self.temperature_k(height_m))


def impact_pressure_pa(speed_mps: FloatArray, pressure_pa: FloatArray, temperature_k: FloatArray) -> FloatArray:
    """Total minus static pressure of air met at a speed (isentropic, check values section b). [Pa]"""
    mach_squared = speed_mps**2 / (HEAT_RATIO * GAS_CONSTANT * temperature_k)
    return np.asarray(pressure_pa * ((1.0 + 0.2 * mach_squared) ** 3.5 - 1.0))


def calibrated_airspeed_mps(impact_pa: FloatArray) -> FloatArray:
    """Calibrated airspeed of an impact pressure; negative pressure gives 0. [m/s]"""
    ratio = np.maximum(impact_pa, 0.0) / SEA_LEVEL_PRESSURE_PA + 1.0
    return np.asarray(SEA_LEVEL_SOUND_MPS * np.sqrt(5.0 * (ratio ** (2.0 / 7.0) - 1.0)))

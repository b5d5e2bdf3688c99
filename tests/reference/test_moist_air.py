"""Density of moist air against CIPM-2007 as evaluated elsewhere, and against general property libraries.

Sources of the figures: A. Picard et al., Metrologia 45 (2008) 149-155, its coefficients as quoted by public code, own
evaluation at high precision; CoolProp 8.0.0 (real moist air); PsychroLib 2.5.0 (ideal moist air).
"""

import pytest

from service.airdata.atmosphere import (
    dry_air_density_from_pressure,
    dynamic_viscosity_from_temperature,
    standard_density_from_altitude,
)
from service.airdata.constants import DRY_AIR_MOLAR_MASS_KGPMOL, MOLAR_GAS_CONSTANT, VAPOUR_MASS_DEFICIT
from service.airdata.humidity import (
    air_density_from_pressure,
    cipm_2007_air_density,
    saturation_vapour_pressure_from_temperature,
    vapour_mole_fraction_from_humidity,
)
from tests.reference.printed import agrees

# fmt: off
MOIST_AIR_ROWS = (
    # t degrees Celsius, p Pa, relative humidity, CIPM-2007, CoolProp, PsychroLib, dry ideal gas [kg/m3]
    (20, 101325, 0.5, "1.19931", 1.19936, 1.19890, "1.20411"),
    (20, 100000, 0.5, "1.18356", 1.18360, 1.18315, "1.18836"),
    (15, 101325, 0.0, "1.22552", 1.22557, 1.22505, "1.22500"),
    (15, 101325, 1.0, "1.21775", 1.21780, 1.21725, "1.22500"),
    (27, 110000, 0.5, "1.26933", 1.26938, 1.26893, "1.27671"),
    (20, 75000, 0.5, "0.88628", 0.88631, 0.88605, "0.89127"),
    (30, 101325, 0.9, "1.14818", 1.14823, 1.14783, "1.16439"),
    (35, 90000, 0.8, "0.99851", 0.99855, 0.99826, "1.01746"),
)
# fmt: on


@pytest.mark.parametrize("row", MOIST_AIR_ROWS)
def test_density_of_moist_air(row: tuple[float, float, float, str, float, float, str]) -> None:
    celsius, pressure, humidity, cipm, real_gas, ideal_gas, dry = row
    kelvin = celsius + 273.15
    assert agrees(cipm_2007_air_density(pressure, kelvin, humidity), cipm)
    assert cipm_2007_air_density(pressure, kelvin, humidity) == pytest.approx(real_gas, rel=6e-5)
    # the ideal moist gas of the other library has no enhancement factor (0.4 % of the vapour, which takes up to
    # 1.9 % of the density) and a gas constant 4e-5 smaller
    assert air_density_from_pressure(pressure, kelvin, humidity) == pytest.approx(ideal_gas, rel=1.3e-4)
    assert agrees(dry_air_density_from_pressure(pressure, kelvin), dry)


def test_constants_of_cipm_2007() -> None:
    assert agrees(1e3 * DRY_AIR_MOLAR_MASS_KGPMOL / MOLAR_GAS_CONSTANT, "3.483740")
    assert agrees(VAPOUR_MASS_DEFICIT, "0.3780")


def test_intermediate_results_of_the_first_row() -> None:
    pressure, kelvin, humidity = 101325.0, 293.15, 0.5
    saturation = saturation_vapour_pressure_from_temperature(kelvin)
    vapour = vapour_mole_fraction_from_humidity(pressure, kelvin, humidity)
    ideal = DRY_AIR_MOLAR_MASS_KGPMOL / MOLAR_GAS_CONSTANT * pressure / kelvin * (1.0 - VAPOUR_MASS_DEFICIT * vapour)
    assert agrees(saturation, "2339.163")
    assert agrees(vapour * pressure / (humidity * saturation), "1.004026")
    assert agrees(vapour, "0.0115893")
    assert agrees(ideal / cipm_2007_air_density(pressure, kelvin, humidity), "0.9996148")


@pytest.mark.parametrize(
    ("bore_m", "airspeed", "reynolds"),
    # closed form, sea level: Reynolds number on the bore of a probe
    [
        (1e-3, 10.0, "685"),
        (1e-3, 15.0, "1027"),
        (2e-3, 5.0, "685"),
        (2e-3, 10.0, "1369"),
        (2e-3, 20.0, "2739"),
        (3e-3, 15.0, "3081"),
    ],
)
def test_reynolds_number_of_a_probe(bore_m: float, airspeed: float, reynolds: str) -> None:
    viscosity = dynamic_viscosity_from_temperature(288.15)
    computed = standard_density_from_altitude(0.0) * airspeed * bore_m / viscosity
    # printed to a whole number, 685 at the least
    assert computed == pytest.approx(float(reynolds), rel=7.5e-4)

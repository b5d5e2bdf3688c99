import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.airdata.atmosphere import dry_air_density_from_pressure
from service.airdata.constants import GAS_CONSTANT_DRY_AIR
from service.airdata.humidity import (
    air_density_from_pressure,
    cipm_2007_air_density,
    saturation_vapour_pressure_from_temperature,
    vapour_mole_fraction_from_humidity,
    virtual_temperature_from_humidity,
)
from service.airdata.pitot import impact_pressure_from_true_airspeed, true_airspeed_from_impact_pressure
from tests.unit.airdata.property_settings import repeatable

pressures = st.floats(50000.0, 110000.0)
temperatures = st.floats(233.15, 318.15)
humidities = st.floats(0.0, 1.0)


@repeatable
@given(pressures, temperatures)
def test_without_humidity_the_air_is_dry(pressure_pa: float, temperature_k: float) -> None:
    dry = dry_air_density_from_pressure(pressure_pa, temperature_k)
    assert air_density_from_pressure(pressure_pa, temperature_k) == dry
    assert air_density_from_pressure(pressure_pa, temperature_k, 0.0) == dry
    assert virtual_temperature_from_humidity(pressure_pa, temperature_k, 0.0) == temperature_k


@repeatable
@given(pressures, temperatures, humidities, humidities)
def test_more_vapour_makes_lighter_air(pressure_pa: float, temperature_k: float, one: float, other: float) -> None:
    drier, moister = sorted((one, other))
    assert air_density_from_pressure(pressure_pa, temperature_k, moister) <= air_density_from_pressure(
        pressure_pa, temperature_k, drier
    )
    assert virtual_temperature_from_humidity(pressure_pa, temperature_k, moister) >= temperature_k


@repeatable
@given(pressures, temperatures, humidities)
def test_ideal_gas_stays_near_cipm_2007(pressure_pa: float, temperature_k: float, humidity: float) -> None:
    ideal = float(air_density_from_pressure(pressure_pa, temperature_k, humidity))
    assert ideal == pytest.approx(float(cipm_2007_air_density(pressure_pa, temperature_k, humidity)), rel=1.5e-3)


def test_figures_of_the_module_docstring() -> None:
    def lighter(celsius: float) -> float:
        args = (101325.0, celsius + 273.15, 0.5)
        return float(1.0 - air_density_from_pressure(*args) / cipm_2007_air_density(*args))

    assert lighter(15.0) == pytest.approx(0.0005, abs=0.0001)
    assert lighter(-30.0) == pytest.approx(0.0011, abs=0.0002)

    def faster(celsius: float, humidity: float) -> float:
        kelvin = celsius + 273.15
        virtual = virtual_temperature_from_humidity(101325.0, kelvin, humidity)
        moist = true_airspeed_from_impact_pressure(250.0, 101325.0, virtual)
        return float(moist / true_airspeed_from_impact_pressure(250.0, 101325.0, kelvin) - 1.0)

    assert faster(15.0, 0.5) == pytest.approx(0.0016, abs=0.00005)
    assert faster(35.0, 0.8) == pytest.approx(0.0085, abs=0.00005)
    assert 1.0 - air_density_from_pressure(101325.0, 273.15, 1.0) / air_density_from_pressure(
        101325.0, 273.15
    ) == pytest.approx(0.0023, abs=0.00005)


@pytest.mark.parametrize("airspeed", [20.0, 50.0, 100.0])
def test_heat_capacity_ratio_of_moist_air_may_be_neglected(airspeed: float) -> None:
    # the whole moist relation: gas constant and heat capacity ratio of the mixture (5/2 R dry, 3 R vapour at constant
    # volume), against dry relations at the virtual temperature
    pressure, temperature, humidity = 90000.0, 308.15, 0.8
    vapour = float(vapour_mole_fraction_from_humidity(pressure, temperature, humidity))
    virtual = float(virtual_temperature_from_humidity(pressure, temperature, humidity))
    impact = float(impact_pressure_from_true_airspeed(airspeed, pressure, virtual))
    gamma = (7.0 * (1.0 - vapour) + 8.0 * vapour) / (5.0 * (1.0 - vapour) + 6.0 * vapour)
    mach_squared = 2.0 / (gamma - 1.0) * np.expm1((gamma - 1.0) / gamma * np.log1p(impact / pressure))
    moist = np.sqrt(mach_squared * gamma * GAS_CONSTANT_DRY_AIR * virtual)
    assert gamma == pytest.approx(1.396, abs=5e-4)
    assert moist == pytest.approx(airspeed, rel=3e-5)


@pytest.mark.parametrize("humidity", [-0.01, 1.01, 55.0, np.nan, np.inf])
def test_humidity_that_is_no_fraction_is_refused(humidity: float) -> None:
    assert np.isnan(air_density_from_pressure(95000.0, 284.0, humidity))
    assert np.isnan(virtual_temperature_from_humidity(95000.0, 284.0, humidity))
    assert np.isnan(cipm_2007_air_density(95000.0, 284.0, humidity))


def test_air_that_could_not_hold_the_vapour_is_refused() -> None:
    assert np.isnan(virtual_temperature_from_humidity(1000.0, 300.0, 1.0))
    assert np.isfinite(virtual_temperature_from_humidity(1000.0, 300.0, 0.01))


@pytest.mark.parametrize("kelvin", [0.0, -5.0, 150.0, 400.0, np.nan, np.inf])
def test_temperatures_out_of_the_formula_are_refused(kelvin: float) -> None:
    assert np.isnan(saturation_vapour_pressure_from_temperature(kelvin))
    assert np.isnan(air_density_from_pressure(95000.0, kelvin, 0.5))


def test_saturation_pressure_grows_over_the_whole_range_taken() -> None:
    saturation = saturation_vapour_pressure_from_temperature(np.linspace(193.15, 333.15, 1401))
    assert (saturation > 0.0).all()
    assert (np.diff(saturation) > 0.0).all()

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.airdata.atmosphere import (
    dry_air_density_from_pressure,
    geometric_from_geopotential_altitude,
    geopotential_from_geometric_altitude,
    pressure_altitude_from_pressure,
    speed_of_sound_from_temperature,
    standard_density_from_altitude,
    standard_pressure_from_altitude,
    standard_speed_of_sound_from_altitude,
    standard_temperature_from_altitude,
)
from service.airdata.constants import (
    SEA_LEVEL_DENSITY_KGPM3,
    SEA_LEVEL_PRESSURE_PA,
    SEA_LEVEL_SPEED_OF_SOUND_MPS,
    SEA_LEVEL_TEMPERATURE_K,
    STANDARD_GRAVITY_MPS2,
)
from service.domain.arrays import FloatArray
from tests.unit.airdata.property_settings import repeatable

altitudes = st.floats(-5000.0, 20000.0)
STANDARD_FUNCTIONS = (
    standard_temperature_from_altitude,
    standard_pressure_from_altitude,
    standard_density_from_altitude,
    standard_speed_of_sound_from_altitude,
)


def test_sea_level_is_the_constants() -> None:
    assert standard_temperature_from_altitude(0.0) == SEA_LEVEL_TEMPERATURE_K
    assert standard_pressure_from_altitude(0.0) == SEA_LEVEL_PRESSURE_PA
    assert standard_density_from_altitude(0.0) == SEA_LEVEL_DENSITY_KGPM3
    assert standard_speed_of_sound_from_altitude(0.0) == SEA_LEVEL_SPEED_OF_SOUND_MPS
    assert pressure_altitude_from_pressure(SEA_LEVEL_PRESSURE_PA) == 0.0


@repeatable
@given(altitudes)
def test_pressure_altitude_undoes_pressure(altitude_m: float) -> None:
    there_and_back = pressure_altitude_from_pressure(standard_pressure_from_altitude(altitude_m))
    assert there_and_back == pytest.approx(altitude_m, abs=1e-9)


@repeatable
@given(st.floats(5480.0, 177600.0))
def test_pressure_undoes_pressure_altitude(pressure_pa: float) -> None:
    assert standard_pressure_from_altitude(pressure_altitude_from_pressure(pressure_pa)) == pytest.approx(
        pressure_pa, rel=1e-13
    )


@repeatable
@given(altitudes)
def test_geometric_altitude_undoes_geopotential(altitude_m: float) -> None:
    geometric = geometric_from_geopotential_altitude(altitude_m)
    assert geopotential_from_geometric_altitude(geometric) == pytest.approx(altitude_m, rel=1e-14)
    assert geometric >= altitude_m


@pytest.mark.parametrize("altitude_m", [-5000.0, 11000.0, 20000.0])
def test_ends_of_the_layers_round_trip(altitude_m: float) -> None:
    pressure = standard_pressure_from_altitude(altitude_m)
    assert pressure_altitude_from_pressure(pressure) == pytest.approx(altitude_m, abs=1e-9)


@pytest.mark.parametrize("function", STANDARD_FUNCTIONS)
@pytest.mark.parametrize("altitude_m", [-5000.0001, 20000.0001, -1e9, 1e9, np.inf, -np.inf, np.nan])
def test_outside_is_nan(function: Callable[[float], FloatArray], altitude_m: float) -> None:
    assert np.isnan(function(altitude_m))


def test_pressures_outside_are_nan() -> None:
    pressures = [0.0, -1.0, 5474.0, 178000.0, np.inf, np.nan]
    assert np.isnan(pressure_altitude_from_pressure(pressures)).all()


def test_pressure_and_density_fall_all_the_way() -> None:
    altitude = np.linspace(-5000.0, 20000.0, 5001)
    assert (np.diff(standard_pressure_from_altitude(altitude)) < 0.0).all()
    assert (np.diff(standard_density_from_altitude(altitude)) < 0.0).all()
    assert (np.diff(pressure_altitude_from_pressure(standard_pressure_from_altitude(altitude))) > 0.0).all()


def test_pressure_is_hydrostatic_in_both_layers() -> None:
    altitude = np.arange(-4995.0, 20000.0, 10.0)
    slope = (standard_pressure_from_altitude(altitude + 1.0) - standard_pressure_from_altitude(altitude - 1.0)) / 2.0
    np.testing.assert_allclose(slope, -STANDARD_GRAVITY_MPS2 * standard_density_from_altitude(altitude), rtol=1e-7)


def test_layers_join_without_a_step() -> None:
    below, above = 11000.0 - 1e-6, 11000.0 + 1e-6
    for function in STANDARD_FUNCTIONS:
        assert function(above) == pytest.approx(float(function(below)), rel=1e-9)


def test_temperature_is_constant_above_the_tropopause() -> None:
    assert standard_temperature_from_altitude(10999.0) > standard_temperature_from_altitude(11000.0)
    np.testing.assert_allclose(standard_temperature_from_altitude([11000.0, 15000.0, 20000.0]), 216.65, rtol=1e-15)


def test_gas_relations_refuse_what_is_not_above_zero() -> None:
    assert np.isnan(dry_air_density_from_pressure([101325.0, 0.0, -5.0], [0.0, 288.15, 288.15])).all()
    assert np.isnan(speed_of_sound_from_temperature([0.0, -10.0])).all()


def test_speed_of_sound_grows_with_the_root_of_temperature() -> None:
    assert speed_of_sound_from_temperature(4.0 * 70.0) == pytest.approx(
        2.0 * float(speed_of_sound_from_temperature(70.0)), rel=1e-15
    )

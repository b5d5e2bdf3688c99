"""Standard atmosphere against printed tables and the closed forms of the standard."""

import pytest

from service.airdata.atmosphere import (
    dynamic_viscosity_from_temperature,
    geopotential_from_geometric_altitude,
    pressure_altitude_from_pressure,
    standard_density_from_altitude,
    standard_pressure_from_altitude,
    standard_speed_of_sound_from_altitude,
    standard_temperature_from_altitude,
)
from service.airdata.constants import (
    GAS_CONSTANT_DRY_AIR,
    SEA_LEVEL_DENSITY_KGPM3,
    SEA_LEVEL_SPEED_OF_SOUND_MPS,
)
from tests.reference.airspeed_points import AIRSPEED_POINTS, AirspeedPoint
from tests.reference.printed import agrees

KNOT_MPS = 1852.0 / 3600.0
STATUTE_MILE_PER_HOUR_MPS = 0.44704
PRINTED_TOLERANCE = 5e-6
"""Six figures, and 0.8 parts per million between the gas constants of US-1976 and ISO."""

# fmt: off
CLOSED_FORM_ROWS = (
    # ISO 2533 closed forms at 40 digits: H m, T K, p Pa, density kg/m3, a m/s, viscosity Pa s (Sutherland), sigma
    (-500, "291.40", "107477.511", "1.28489062", "342.207669", "1.80502e-5", "1.0488903"),
    (0, "288.15", "101325.000", "1.22500002", "340.293988", "1.78938e-5", "1.0000000"),
    (500, "284.90", "95460.8353", "1.16726883", "338.369484", "1.77366e-5", "0.9528725"),
    (1000, "281.65", "89874.5629", "1.11164250", "336.433971", "1.75785e-5", "0.9074633"),
    (1500, "278.40", "84555.9941", "1.05806726", "334.487259", "1.74195e-5", "0.8637284"),
    (2000, "275.15", "79495.2019", "1.00649010", "332.529151", "1.72596e-5", "0.8216246"),
    (3000, "268.65", "70108.5265", "0.90912186", "328.577928", "1.69372e-5", "0.7421403"),
    (5000, "255.65", "54019.8882", "0.73611555", "320.529394", "1.62812e-5", "0.6009106"),
    (8000, "236.15", "35599.7852", "0.52516713", "308.062574", "1.52677e-5", "0.4287079"),
    (11000, "216.65", "22632.0401", "0.36391765", "295.069494", "1.42161e-5", "0.2970756"),
    (15000, "216.65", "12044.5528", "0.19367345", "295.069494", "1.42161e-5", "0.1581008"),
    (20000, "216.65", "5474.87742", "0.08803468", "295.069494", "1.42161e-5", "0.0718650"),
)
US_1976_ROWS = (
    # US Standard Atmosphere 1976, Table I, as transcribed in public texts: H m, p Pa, density kg/m3, a m/s
    (0, 101325.0, 1.225000, 340.294),
    (500, 95460.8, 1.167270, 338.370),
    (1000, 89874.6, 1.111640, 336.434),
    (1500, 84556.0, 1.058070, 334.487),
    (2000, 79495.2, 1.006490, 332.529),
    (3000, 70108.5, 0.909122, 328.578),
    (5000, 54019.9, 0.736116, 320.529),
    (8000, 35599.8, 0.525168, 308.063),
    (11000, 22632.1, 0.363918, 295.070),
    (15000, 12044.6, 0.193674, 295.070),
    (20000, 5474.89, 0.0880349, None),
)
GEOMETRIC_ROWS = (
    # Mechanical Engineers' Handbook, vol. 4, Table 6, by GEOMETRIC altitude Z m: H m, T K, p bar, density kg/m3, a m/s.
    # The speed of sound at 5000 m is printed 320.6, a misprint for 320.5 (exact 320.545).
    (1000, "999.8", "281.65", "0.8988", "1.1117", "336.4"),
    (2000, "1999.4", "275.15", "0.7950", "1.0066", "332.5"),
    (3000, "2998.6", "268.66", "0.7012", "0.9093", "328.6"),
    (5000, "4996.1", "255.68", "0.5405", "0.7364", "320.5"),
    (8000, "7989.9", "236.22", "0.3565", "0.5258", "308.1"),
    (10000, "9984.3", "223.25", "0.2650", "0.4135", "299.5"),
)
# fmt: on


@pytest.mark.parametrize("row", CLOSED_FORM_ROWS, ids=lambda row: f"{row[0]}m")
def test_closed_form_table_to_its_last_digit(row: tuple[float, str, str, str, str, str, str]) -> None:
    altitude, temperature, pressure, density, sound, viscosity, sigma = row
    assert agrees(standard_temperature_from_altitude(altitude), temperature)
    assert agrees(standard_pressure_from_altitude(altitude), pressure)
    assert agrees(standard_density_from_altitude(altitude), density)
    assert agrees(standard_speed_of_sound_from_altitude(altitude), sound)
    assert agrees(dynamic_viscosity_from_temperature(standard_temperature_from_altitude(altitude)), viscosity)
    assert agrees(standard_density_from_altitude(altitude) / SEA_LEVEL_DENSITY_KGPM3, sigma)


@pytest.mark.parametrize("point", AIRSPEED_POINTS, ids=str)
def test_closed_forms_at_ten_digits(point: AirspeedPoint) -> None:
    altitude = point.geopotential_altitude_m
    assert standard_pressure_from_altitude(altitude) == pytest.approx(point.static_pressure_pa, rel=1e-9)
    assert standard_density_from_altitude(altitude) == pytest.approx(point.density_kgpm3, rel=1e-9)
    assert standard_speed_of_sound_from_altitude(altitude) == pytest.approx(point.speed_of_sound_mps, rel=1e-9)
    assert pressure_altitude_from_pressure(point.static_pressure_pa) == pytest.approx(altitude, abs=1e-5)


@pytest.mark.parametrize("row", US_1976_ROWS, ids=lambda row: f"{row[0]}m")
def test_printed_us_1976_table(row: tuple[float, float, float, float | None]) -> None:
    altitude, pressure, density, sound = row
    assert standard_pressure_from_altitude(altitude) == pytest.approx(pressure, rel=PRINTED_TOLERANCE)
    assert standard_density_from_altitude(altitude) == pytest.approx(density, rel=PRINTED_TOLERANCE)
    if sound is not None:
        assert standard_speed_of_sound_from_altitude(altitude) == pytest.approx(sound, rel=PRINTED_TOLERANCE)


@pytest.mark.parametrize("row", GEOMETRIC_ROWS, ids=lambda row: f"{row[0]}m")
def test_printed_table_by_geometric_altitude(row: tuple[float, str, str, str, str, str]) -> None:
    geometric, geopotential, temperature, pressure_bar, density, sound = row
    altitude = geopotential_from_geometric_altitude(geometric)
    assert agrees(altitude, geopotential)
    assert agrees(standard_temperature_from_altitude(altitude), temperature)
    assert agrees(standard_pressure_from_altitude(altitude) / 1e5, pressure_bar)
    assert agrees(standard_density_from_altitude(altitude), density)
    assert agrees(standard_speed_of_sound_from_altitude(altitude), sound)


def test_geometric_table_tells_the_two_altitudes_apart() -> None:
    # the guard of the table above: read as geopotential, its rows from 3000 m on do not agree
    assert not agrees(standard_temperature_from_altitude(3000.0), "268.66")
    assert not agrees(standard_temperature_from_altitude(8000.0), "236.22")


def test_sea_level_constants_in_several_units() -> None:
    # closed forms at 40 digits; NASA RP-1046, tables A19 and A27, print 661.48 kt and 761.22 mph
    sound = SEA_LEVEL_SPEED_OF_SOUND_MPS
    assert agrees(sound, "340.293988026")
    assert agrees(sound / KNOT_MPS, "661.4785944")
    assert agrees(sound / STATUTE_MILE_PER_HOUR_MPS, "761.2159718")
    assert agrees(sound * 3.6, "1225.0583569")
    assert agrees(sound / KNOT_MPS, "661.48")
    assert agrees(sound / STATUTE_MILE_PER_HOUR_MPS, "761.22")
    assert agrees(SEA_LEVEL_DENSITY_KGPM3, "1.22500001812")
    assert pytest.approx(1.225, rel=1.5e-8) == SEA_LEVEL_DENSITY_KGPM3


def test_gas_constant_agrees_with_us_1976() -> None:
    # US Standard Atmosphere 1976: 8.31432 J/(mol K) over 28.9644 g/mol
    assert pytest.approx(8.31432 / 28.9644e-3, rel=1e-6) == GAS_CONSTANT_DRY_AIR


@pytest.mark.parametrize(
    ("altitude", "slope"), [(0.0, "12.013"), (100.0, "11.898"), (500.0, "11.447"), (1500.0, "10.376")]
)
def test_pressure_slope_with_altitude(altitude: float, slope: str) -> None:
    # closed form density x gravity [Pa/m]; hydrostatics by a central difference of the pressures
    difference = standard_pressure_from_altitude(altitude - 0.5) - standard_pressure_from_altitude(altitude + 0.5)
    assert agrees(difference, slope)

"""Impact pressure and airspeed against printed tables and the closed forms of isentropic flow."""

import numpy as np
import pytest

from service.airdata.atmosphere import speed_of_sound_from_temperature, standard_temperature_from_altitude
from service.airdata.constants import SEA_LEVEL_DENSITY_KGPM3, SEA_LEVEL_PRESSURE_PA
from service.airdata.pitot import (
    calibrated_airspeed_from_impact_pressure,
    calibrated_from_true_airspeed,
    equivalent_from_calibrated_airspeed,
    equivalent_from_true_airspeed,
    impact_pressure_from_calibrated_airspeed,
    impact_pressure_from_mach,
    impact_pressure_from_true_airspeed,
    mach_from_calibrated_airspeed,
    mach_from_impact_pressure,
    true_airspeed_from_impact_pressure,
    true_from_calibrated_airspeed,
)
from tests.reference.airspeed_points import AIRSPEED_POINTS, AirspeedPoint
from tests.reference.printed import agrees, half_unit

KNOT_MPS = 1852.0 / 3600.0
STATUTE_MILE_PER_HOUR_MPS = 0.44704
KILOMETRE_PER_HOUR_MPS = 1.0 / 3.6
POUND_PER_SQUARE_FOOT_PA = 0.45359237 * 9.80665 / 0.3048**2
INCH_OF_WATER_20C_PA = SEA_LEVEL_PRESSURE_PA / 407.513
MILLIMETRE_OF_WATER_20C_PA = SEA_LEVEL_PRESSURE_PA / 10350.8

# K. Horton, corrections to two magazine tables (2007 and 2009); water column at 20 degrees Celsius after NASA RP-1046,
# tables A19 and A27: 101325 Pa = 407.513 in = 10350.8 mm.
# fmt: off
KNOTS_TO_INCHES = {
    40: "1.04", 50: "1.63", 60: "2.35", 70: "3.20", 80: "4.19", 90: "5.31", 100: "6.56", 110: "7.94", 120: "9.47",
    130: "11.12", 140: "12.92", 150: "14.86", 160: "16.94", 170: "19.15", 180: "21.52", 190: "24.02", 200: "26.68",
    210: "29.48", 220: "32.44", 230: "35.54", 240: "38.80", 250: "42.22",
}
MILES_TO_INCHES = {
    40: "0.79", 50: "1.23", 60: "1.77", 70: "2.42", 80: "3.16", 90: "4.00", 100: "4.94", 110: "5.99", 120: "7.13",
    130: "8.38", 140: "9.73", 150: "11.18", 160: "12.74", 170: "14.41", 180: "16.17", 190: "18.05", 200: "20.03",
    210: "22.13", 220: "24.33", 230: "26.64", 240: "29.07", 250: "31.61", 260: "34.26", 270: "37.03", 280: "39.92",
    290: "42.93",
}
KILOMETRES_TO_CENTIMETRES = {
    60: "1.74", 70: "2.37", 80: "3.09", 90: "3.92", 100: "4.84", 110: "5.85", 120: "6.97", 130: "8.18", 140: "9.49",
    150: "10.90", 160: "12.41", 170: "14.02",
}
KNOTS_TO_MILLIMETRES = {
    15: "3.7", 20: "6.6", 25: "10.4", 30: "14.9", 35: "20.3", 40: "26.5", 45: "33.6", 50: "41.5", 55: "50.2",
    60: "59.7", 65: "70.1", 70: "81.4", 75: "93.4", 80: "106.4", 85: "120.1", 90: "134.8", 95: "150.2",
}
MILES_TO_MILLIMETRES = {
    15: "2.8", 20: "5.0", 25: "7.8", 30: "11.3", 35: "15.3", 40: "20.0", 45: "25.3", 50: "31.3", 55: "37.9",
    60: "45.1", 65: "52.9", 70: "61.4", 75: "70.5", 80: "80.2", 85: "90.6", 90: "101.6", 95: "113.3", 100: "125.6",
}
# fmt: on
WATER_COLUMN_FIGURES = [
    (airspeed * speed_unit, figure, column_unit)
    for table, speed_unit, column_unit in (
        (KNOTS_TO_INCHES, KNOT_MPS, INCH_OF_WATER_20C_PA),
        (MILES_TO_INCHES, STATUTE_MILE_PER_HOUR_MPS, INCH_OF_WATER_20C_PA),
        (KILOMETRES_TO_CENTIMETRES, KILOMETRE_PER_HOUR_MPS, 10.0 * MILLIMETRE_OF_WATER_20C_PA),
        (KNOTS_TO_MILLIMETRES, KNOT_MPS, MILLIMETRE_OF_WATER_20C_PA),
        (MILES_TO_MILLIMETRES, STATUTE_MILE_PER_HOUR_MPS, MILLIMETRE_OF_WATER_20C_PA),
    )
    for airspeed, figure in table.items()
]

# closed form at 40 digits: CAS, impact pressure Pa, lb/ft2, inches of water at 20 degrees, ratio to density V^2 / 2
# fmt: off
KNOT_ROWS = (
    (15, "36.4772", "0.7618", "0.1467", "1.000129"),
    (20, "64.8548", "1.3545", "0.2608", "1.000229"),
    (30, "145.9651", "3.0485", "0.5870", "1.000514"),
    (40, "259.5972", "5.4218", "1.0441", "1.000915"),
    (50, "405.8292", "8.4759", "1.6322", "1.001429"),
    (60, "584.7614", "12.2130", "2.3518", "1.002059"),
    (80, "1041.2393", "21.7467", "4.1877", "1.003662"),
    (100, "1630.2831", "34.0492", "6.5567", "1.005727"),
    (150, "3694.3793", "77.1587", "14.8582", "1.012922"),
    (200, "6633.5460", "138.5445", "26.6791", "1.023064"),
    (250, "10498.2230", "219.2599", "42.2222", "1.036222"),
    (300, "15354.7104", "320.6898", "61.7542", "1.052485"),
)
MILE_ROWS = (
    (15, "27.5438", "0.5753", "0.1108"),
    (20, "48.9704", "1.0228", "0.1970"),
    (30, "110.2072", "2.3017", "0.4432"),
    (40, "195.9831", "4.0932", "0.7882"),
    (50, "306.3425", "6.3981", "1.2321"),
    (60, "441.3426", "9.2176", "1.7750"),
    (80, "785.5570", "16.4067", "3.1594"),
    (100, "1229.3394", "25.6753", "4.9442"),
    (150, "2780.9501", "58.0813", "11.1845"),
    (200, "4981.2784", "104.0362", "20.0339"),
    (250, "7858.8308", "164.1351", "31.6070"),
    (300, "11450.8803", "239.1566", "46.0536"),
)
METRE_ROWS = (
    # closed form at 40 digits: CAS m/s, impact pressure Pa, relative error of density V^2 / 2
    (5, "15.31333", "5.4e-5"), (8, "39.20542", "1.38e-4"), (10, "61.26323", "2.16e-4"), (12, "88.22742", "3.11e-4"),
    (15, "137.87946", "4.86e-4"), (18, "198.58885", "7.00e-4"), (20, "245.21165", "8.64e-4"),
    (25, "383.32932", "1.350e-3"), (30, "552.32192", "1.945e-3"), (35, "752.29892", "2.647e-3"),
    (40, "983.38984", "3.459e-3"), (50, "1539.53239", "5.409e-3"), (60, "2222.19066", "7.796e-3"),
    (80, "3974.46216", "1.389e-2"), (100, "6258.37676", "2.178e-2"),
)
# fmt: on


def test_water_column_table_is_whole() -> None:
    assert len(WATER_COLUMN_FIGURES) == 95


@pytest.mark.parametrize(("airspeed_mps", "figure", "unit_pa"), WATER_COLUMN_FIGURES)
def test_printed_water_columns(airspeed_mps: float, figure: str, unit_pa: float) -> None:
    # half a unit of the last digit, and the rounding of the speed of sound that the source took (761.22 mph: 1.1e-5 in
    # pressure), which decides the one tie among them: 60 mph, 1.77501 in, printed 1.77
    column = float(impact_pressure_from_calibrated_airspeed(airspeed_mps)) / unit_pa
    assert column == pytest.approx(float(figure), abs=half_unit(figure) + 1.1e-5 * column, rel=0.0)


def test_units_of_the_printed_tables() -> None:
    assert pytest.approx(248.64237, abs=5e-6) == INCH_OF_WATER_20C_PA
    assert pytest.approx(9.789098, abs=5e-7) == MILLIMETRE_OF_WATER_20C_PA


@pytest.mark.parametrize("row", KNOT_ROWS, ids=lambda row: f"{row[0]}kt")
def test_closed_form_by_knots(row: tuple[float, str, str, str, str]) -> None:
    knots, pascal, pounds, inches, ratio = row
    airspeed = knots * KNOT_MPS
    impact = float(impact_pressure_from_calibrated_airspeed(airspeed))
    assert agrees(impact, pascal)
    assert agrees(impact / POUND_PER_SQUARE_FOOT_PA, pounds)
    assert agrees(impact / INCH_OF_WATER_20C_PA, inches)
    assert agrees(impact / (0.5 * SEA_LEVEL_DENSITY_KGPM3 * airspeed**2), ratio)
    assert calibrated_airspeed_from_impact_pressure(impact) == pytest.approx(airspeed, rel=1e-13)


@pytest.mark.parametrize("row", MILE_ROWS, ids=lambda row: f"{row[0]}mph")
def test_closed_form_by_miles_per_hour(row: tuple[float, str, str, str]) -> None:
    miles, pascal, pounds, inches = row
    impact = float(impact_pressure_from_calibrated_airspeed(miles * STATUTE_MILE_PER_HOUR_MPS))
    assert agrees(impact, pascal)
    assert agrees(impact / POUND_PER_SQUARE_FOOT_PA, pounds)
    assert agrees(impact / INCH_OF_WATER_20C_PA, inches)


@pytest.mark.parametrize("row", METRE_ROWS, ids=lambda row: f"{row[0]}mps")
def test_closed_form_by_metres_per_second(row: tuple[float, str, str]) -> None:
    airspeed, pascal, incompressible_error = row
    impact = float(impact_pressure_from_calibrated_airspeed(airspeed))
    assert agrees(impact, pascal)
    assert agrees(impact / (0.5 * SEA_LEVEL_DENSITY_KGPM3 * airspeed**2) - 1.0, incompressible_error)


@pytest.mark.parametrize(
    ("impact_pressure_pa", "airspeed"),
    [(250.0, "20.194"), (500.0, "28.546"), (1250.0, "45.076"), (1500.0, "49.357"), (6894.757, "104.849")],
)
def test_closed_form_inverse_points(impact_pressure_pa: float, airspeed: str) -> None:
    assert agrees(calibrated_airspeed_from_impact_pressure(impact_pressure_pa), airspeed)


def test_low_speed_form_lies_above_by_the_compressibility() -> None:
    # common practice: V = sqrt(2 q / density) gives 20.203 m/s at 250 Pa where the exact form gives 20.194
    assert agrees(np.sqrt(2.0 * 250.0 / 1.225), "20.203")
    assert agrees(calibrated_airspeed_from_impact_pressure(250.0), "20.194")


@pytest.mark.parametrize(
    ("mach", "static_over_total"),
    [
        (0.8, "0.65602"),  # printed in NACA Report 1135, Table I; the others are its closed form at 40 digits
        (0.1, "0.99303"),
        (0.2, "0.97250"),
        (0.3, "0.93947"),
        (0.4, "0.89561"),
        (0.5, "0.84302"),
        (0.6, "0.78400"),
    ],
)
def test_isentropic_table(mach: float, static_over_total: str) -> None:
    assert agrees(1.0 / (1.0 + impact_pressure_from_mach(mach, 1.0)), static_over_total)


@pytest.mark.parametrize("mach", [1e-4, 0.01, 0.05, 0.1])
def test_small_mach_expansion(mach: float) -> None:
    # standard series: q / (gamma p M^2 / 2) = 1 + M^2/4 + M^4/40 + M^6/1600; the next term is below M^8 / 1000
    series = 1.0 + mach**2 / 4.0 + mach**4 / 40.0 + mach**6 / 1600.0
    ratio = impact_pressure_from_mach(mach, 1.0) / (0.7 * mach**2)
    assert ratio == pytest.approx(series, rel=mach**8 / 1000.0 + 1e-15)


@pytest.mark.parametrize("point", AIRSPEED_POINTS, ids=str)
def test_whole_chain_at_ten_digits(point: AirspeedPoint) -> None:
    pressure = point.static_pressure_pa
    temperature = standard_temperature_from_altitude(point.geopotential_altitude_m)
    calibrated = point.calibrated_airspeed_mps
    impact = impact_pressure_from_calibrated_airspeed(calibrated)
    assert impact == pytest.approx(point.impact_pressure_pa, rel=1e-9)
    assert mach_from_impact_pressure(impact, pressure) == pytest.approx(point.mach, rel=1e-9)
    assert mach_from_calibrated_airspeed(calibrated, pressure) == pytest.approx(point.mach, rel=1e-9)
    true = true_airspeed_from_impact_pressure(impact, pressure, temperature)
    assert true == pytest.approx(point.true_airspeed_mps, rel=1e-9)
    assert true_from_calibrated_airspeed(calibrated, pressure, temperature) == pytest.approx(float(true), rel=1e-14)
    equivalent = equivalent_from_calibrated_airspeed(calibrated, pressure)
    assert equivalent == pytest.approx(point.equivalent_airspeed_mps, rel=1e-9)
    true_given = point.true_airspeed_mps
    assert equivalent_from_true_airspeed(true_given, pressure, temperature) == pytest.approx(
        float(equivalent), rel=1e-9
    )
    assert calibrated_from_true_airspeed(true_given, pressure, temperature) == pytest.approx(calibrated, rel=1e-9)


def test_measured_temperature_moves_true_airspeed_alone() -> None:
    # check values, section b: replace a(T) only
    warm, standard = 300.0, 281.65
    impact, pressure = 383.32931691, 89874.562916
    ratio = true_airspeed_from_impact_pressure(impact, pressure, warm) / true_airspeed_from_impact_pressure(
        impact, pressure, standard
    )
    expected = speed_of_sound_from_temperature(warm) / speed_of_sound_from_temperature(standard)
    assert ratio == pytest.approx(float(expected), rel=1e-15)
    assert ratio == pytest.approx(np.sqrt(warm / standard), rel=1e-15)


@pytest.mark.parametrize(
    ("true_airspeed", "indicated_pressure", "indicated_airspeed"),
    [(18.0, "160.365565", "16.571237"), (22.0, "239.642130", "20.254272"), (20.0, "198.015032", None)],
)
def test_constructed_probe_that_reads_low(
    true_airspeed: float, indicated_pressure: str, indicated_airspeed: str | None
) -> None:
    # constructed sets S1 and S2: standard air at 500 m, reading = impact pressure / 1.18
    pressure, temperature = 95460.835337, 284.90
    reading = impact_pressure_from_true_airspeed(true_airspeed, pressure, temperature) / 1.18
    assert agrees(reading, indicated_pressure)
    if indicated_airspeed is not None:
        assert agrees(true_airspeed_from_impact_pressure(reading, pressure, temperature), indicated_airspeed)

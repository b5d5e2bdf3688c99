"""Foreign units, with the traps of their spellings."""

import pytest

from service.domain.errors import WrongValues
from service.domain.glossary import GLOSSARY, STREAM_OF
from service.readers.units import COLUMN_NAMES, ToSI, accepted_units, column_named, to_si


@pytest.mark.parametrize(
    ("column", "unit", "written", "expected"),
    [
        # exact by definition: ISO 80000, SI Brochure, international yard and nautical mile
        ("ground_speed_mps", "kt", 1.0, 1852.0 / 3600.0),
        ("ground_speed_mps", "Knots", 1.0, 1852.0 / 3600.0),
        ("ground_speed_mps", "km/h", 36.0, 10.0),
        ("ground_speed_mps", "mph", 1.0, 0.44704),
        ("ground_speed_mps", "ft/s", 1.0, 0.3048),
        ("velocity_down_mps", "ft/min", 1.0, 0.00508),
        ("velocity_down_mps", "cm/s", 250.0, 2.5),
        ("static_pressure_pa", "hPa", 1013.25, 101325.0),
        ("static_pressure_pa", "mbar", 1013.25, 101325.0),
        ("static_pressure_pa", "kPa", 101.325, 101325.0),
        ("impact_pressure_pa", "psi", 1.0, 6894.757293168),
        ("impact_pressure_pa", "psf", 1.0, 47.88025898),
        # published tables (NASA RP-1046, A19 and A27): 101325 Pa = 407.513 in = 10350.8 mm of water at 20 degC
        ("impact_pressure_pa", "inH2O", 407.513, 101325.0),
        ("impact_pressure_pa", "mmH2O", 10350.8, 101325.0),
        ("impact_pressure_pa", "cmH2O", 1035.08, 101325.0),
        # NIST SP 811, appendix B.8
        ("impact_pressure_pa", "inH2O_4C", 1.0, 249.0889),
        ("impact_pressure_pa", "mmH2O_4C", 1.0, 9.80665),
        ("impact_pressure_pa", "inH2O_60F", 1.0, 248.84),
        ("static_pressure_pa", "inHg", 29.92126, 101325.0),
        ("air_temperature_k", "degC", 15.0, 288.15),
        ("air_temperature_k", "°C", -40.0, 233.15),
        ("air_temperature_k", "C", 0.0, 273.15),
        ("air_temperature_k", "°F", 59.0, 288.15),
        ("air_temperature_k", "degF", -40.0, 233.15),
        ("altitude_m", "ft", 1000.0, 304.8),
        ("altitude_m", "mm", 1500.0, 1.5),
        ("roll_deg", "rad", 3.141592653589793, 180.0),
        ("latitude_deg", "1e-7deg", 471234567.0, 47.1234567),
        ("relative_humidity", "%", 45.0, 0.45),
        # never a gram
        ("load_factor", "g", 1.5, 1.5),
        ("load_factor", "m/s2", 9.80665, 1.0),
        ("time_s", "ms", 1500.0, 1.5),
        ("time_s", "us", 1.5e6, 1.5),
        ("time_s", "µs", 1.5e6, 1.5),
    ],
)
def test_published_values(column: str, unit: str, written: float, expected: float) -> None:
    conversion = to_si(column, unit)
    assert conversion.factor * written + conversion.offset == pytest.approx(expected, rel=4e-6)


@pytest.mark.parametrize("column", COLUMN_NAMES)
def test_the_own_unit_changes_nothing_and_every_spelling_is_known(column: str) -> None:
    own = GLOSSARY[column].unit
    assert to_si(column, own) == ToSI(1.0, 0.0)
    for spelling in accepted_units(column):
        assert to_si(column, spelling).factor > 0.0


@pytest.mark.parametrize(
    ("column", "unit"),
    [
        ("air_temperature_k", "g"),
        ("load_factor", "gram"),
        ("ground_speed_mps", "Pa"),
        ("time_s", "10**10**10"),
        ("impact_pressure_pa", "pascal * 2"),
        ("altitude_m", ""),
        ("altitude_m", "__import__('os')"),
    ],
)
def test_other_spellings_are_refused_with_those_that_are_known(column: str, unit: str) -> None:
    with pytest.raises(WrongValues, match="known are"):
        to_si(column, unit)


def test_a_quantity_may_leave_its_unit_out() -> None:
    assert column_named("impact_pressure") == "impact_pressure_pa"
    assert column_named("Ground_Speed_mps") == "ground_speed_mps"
    assert column_named("time") == "time_s"
    assert column_named("load_factor") == "load_factor"
    assert column_named("mass") is None


def test_columns_have_their_unit_in_the_name_and_the_glossary() -> None:
    suffixes = {
        "s": "_s",
        "Pa": "_pa",
        "K": "_k",
        "m/s": "_mps",
        "deg": "_deg",
        "m": "_m",
        "kg": "_kg",
        "m2": "_m2",
        "1": "",
    }
    assert set(STREAM_OF) < set(GLOSSARY)
    for name, term in GLOSSARY.items():
        assert name.endswith(suffixes[term.unit]), name
        assert term.meaning.endswith("."), name

"""Units that foreign columns may be written in, and how they become SI. Sole user of the units library.

Which unit a spelling means depends on what the column holds: `g` is the standard acceleration of a load factor, never a
gram, and `C` a temperature. Spellings form closed lists, compared without regard to case, so that no expression of a
client is ever evaluated.

An inch (millimetre, centimetre) of water is that of 20 degrees Celsius, as in the published tables of airspeed against
column height; the columns of 4 degC (0.18 % more) and 60 degF have their own spellings.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from service.domain.errors import WrongValues
from service.domain.glossary import GLOSSARY, STREAM_OF

INCH_OF_WATER_20C_PA = 248.64237
"""[Pa] NASA RP-1046, tables A19 and A27: 101325 Pa are 407.513 inches of water at 20 degC."""
INCH_OF_WATER_4C_PA = 249.08891
"""[Pa] The conventional column: 1000 kg/m3 at standard gravity."""
INCH_OF_WATER_60F_PA = 248.84
"""[Pa] NIST SP 811, appendix B.8: at 60 degF."""


@dataclass(frozen=True, slots=True)
class ToSI:
    """`value in SI = factor * value + offset`."""

    factor: float
    offset: float = 0.0


SAME = ToSI(1.0)

_WATER_COLUMNS_PA: Mapping[str, float] = {
    f"{length}_of_water_{temperature}": pascals * millimetres / 25.4
    for length, millimetres in (("inch", 25.4), ("centimeter", 10.0), ("millimeter", 1.0))
    for temperature, pascals in (
        ("20C", INCH_OF_WATER_20C_PA),
        ("4C", INCH_OF_WATER_4C_PA),
        ("60F", INCH_OF_WATER_60F_PA),
    )
}
_OWN_UNITS: Mapping[str, str] = {"degree_e7": "1e-7 degree"} | {
    name: f"{pascals!r} pascal" for name, pascals in _WATER_COLUMNS_PA.items()
}
"""What the library lacks or defines otherwise."""


def _spellings(units: Mapping[str, str]) -> dict[str, str]:
    """Library's name -> our spellings, turned round."""
    return {spelling: name for name, spellings in units.items() for spelling in spellings.split()}


_TIME = _spellings({"second": "s sec second seconds", "millisecond": "ms", "microsecond": "us µs μs", "minute": "min"})
_WATER = _spellings(
    {
        "inch_of_water_20C": "inh2o inh2o_20c",
        "centimeter_of_water_20C": "cmh2o cmh2o_20c",
        "millimeter_of_water_20C": "mmh2o mmh2o_20c",
        "inch_of_water_4C": "inh2o_4c",
        "centimeter_of_water_4C": "cmh2o_4c",
        "millimeter_of_water_4C": "mmh2o_4c",
        "inch_of_water_60F": "inh2o_60f",
        "centimeter_of_water_60F": "cmh2o_60f",
        "millimeter_of_water_60F": "mmh2o_60f",
    }
)
_PRESSURE = _WATER | _spellings(
    {
        "pascal": "pa pascal",
        "hectopascal": "hpa mbar mb",
        "kilopascal": "kpa",
        "bar": "bar",
        "pound_force_per_square_inch": "psi",
        "force_pound / foot ** 2": "psf lb/ft2 lb/ft² lbf/ft2 lbf/ft²",
        "inch_Hg_32F": "inhg",
        "millimeter_Hg": "mmhg",
        "torr": "torr",
        "atmosphere": "atm",
    }
)
_TEMPERATURE = _spellings(
    {"kelvin": "k kelvin", "degree_Celsius": "degc °c c celsius", "degree_Fahrenheit": "degf °f f"}
)
_SPEED = _spellings(
    {
        "meter / second": "m/s mps m*s-1 m.s-1 ms-1",
        "centimeter / second": "cm/s",
        "millimeter / second": "mm/s",
        "kilometer / hour": "km/h kmh kph kmph",
        "knot": "kt kts kn knot knots",
        "mile / hour": "mph mi/h",
        "foot / second": "ft/s fps",
        "foot / minute": "ft/min fpm",
    }
)
_ANGLE = _spellings({"degree": "deg ° degree degrees", "radian": "rad radian radians", "degree_e7": "1e-7deg dege7"})
_LENGTH = _spellings(
    {"meter": "m meter metre", "foot": "ft feet foot", "kilometer": "km", "millimeter": "mm", "centimeter": "cm"}
)
_FRACTION = _spellings({"dimensionless": "1 fraction ratio", "percent": "% percent %rh"})
_LOAD_FACTOR = _spellings(
    {
        "standard_gravity": "1 g g0 gn",
        "meter / second ** 2": "m/s2 m/s² m/s^2 m/s/s",
        "foot / second ** 2": "ft/s2 ft/s² ft/s^2",
    }
)
_COUNT = {"1": "dimensionless"}

_BY_UNIT: Mapping[str, tuple[Mapping[str, str], str]] = {
    "s": (_TIME, "second"),
    "Pa": (_PRESSURE, "pascal"),
    "K": (_TEMPERATURE, "kelvin"),
    "m/s": (_SPEED, "meter / second"),
    "deg": (_ANGLE, "degree"),
    "m": (_LENGTH, "meter"),
}
_BY_NAME: Mapping[str, tuple[Mapping[str, str], str]] = {
    "relative_humidity": (_FRACTION, "dimensionless"),
    "load_factor": (_LOAD_FACTOR, "standard_gravity"),
    "fix": (_COUNT, "dimensionless"),
}

COLUMN_NAMES: tuple[str, ...] = ("time_s", *STREAM_OF)
"""All column names of the contract."""


def _tables(column: str) -> tuple[Mapping[str, str], str]:
    return _BY_NAME[column] if column in _BY_NAME else _BY_UNIT[GLOSSARY[column].unit]


def accepted_units(column: str) -> tuple[str, ...]:
    """Spellings of the units that a foreign column of this meaning may be written in."""
    return tuple(_tables(column)[0])


@cache
def to_si(column: str, unit: str) -> ToSI:
    """How values of `column` written in `unit` become the unit of its name.

    Raises
    ------
    WrongValues
        The unit is none of `accepted_units`.
    """
    spellings, si = _tables(column)
    name = spellings.get(unit.strip().lower())
    if name is None:
        raise WrongValues(f"Unknown unit for {column}; known are {', '.join(spellings)}.")
    return SAME if name == si else _converted(name, si)


def _converted(unit: str, si: str) -> ToSI:
    registry = _registry()
    zero, one = (registry.Quantity(value, registry.parse_units(unit)).to(si).magnitude for value in (0.0, 1.0))
    return ToSI(float(one - zero), float(zero))


@cache
def _registry() -> Any:
    """Made on first need: it takes a quarter of a second, and most logs need no units."""
    from pint import UnitRegistry

    registry: Any = UnitRegistry(autoconvert_offset_to_baseunit=True)
    for name, meaning in _OWN_UNITS.items():
        registry.define(f"{name} = {meaning}")
    return registry


def column_named(quantity: str) -> str | None:
    """The contract's column for a quantity, whose unit suffix may be left out; None for an unknown one."""
    return _BY_QUANTITY.get(quantity.strip().lower())


def _by_quantity(columns: Iterable[str]) -> dict[str, str]:
    names = {column: column for column in columns}
    suffixes = ("_s", "_pa", "_k", "_mps", "_deg", "_m")
    stems = {column.removesuffix(suffix): column for column in names for suffix in suffixes if column.endswith(suffix)}
    return stems | names


_BY_QUANTITY = _by_quantity(COLUMN_NAMES)

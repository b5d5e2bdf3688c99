"""Load factors, turns and stall speeds against printed rules and the closed forms."""

import numpy as np
import pytest

from service.airdata.constants import STANDARD_GRAVITY_MPS2
from service.airdata.turning_flight import (
    load_factor_from_bank,
    load_factor_from_turn_rate,
    stall_speed_at_load_factor,
    turn_radius_from_bank,
    turn_radius_from_turn_rate,
    turn_rate_from_bank,
)
from tests.reference.printed import agrees

KNOT_MPS = 1852.0 / 3600.0


@pytest.mark.parametrize(
    ("bank", "load_factor", "stall_ratio"),
    # closed form of the relation in FAA-H-8083-3, Airplane Flying Handbook: n = 1 / cos(bank), Vs grows with sqrt(n)
    [
        (15.0, "1.0353", "1.0175"),
        (20.0, "1.0642", "1.0316"),
        (30.0, "1.1547", "1.0746"),
        (40.0, "1.3054", "1.1425"),
        (45.0, "1.4142", "1.1892"),
        (50.0, "1.5557", "1.2473"),
        (60.0, "2.0000", "1.4142"),
        (70.0, "2.9238", "1.7099"),
    ],
)
def test_load_factor_table(bank: float, load_factor: str, stall_ratio: str) -> None:
    assert agrees(load_factor_from_bank(bank), load_factor)
    assert agrees(stall_speed_at_load_factor(1.0, load_factor_from_bank(bank)), stall_ratio)


def test_worked_example_of_a_banked_stall() -> None:
    # FAA Airplane Flying Handbook, quoted: 50 kt, 45 degrees of bank: 1.41 g, 59.5 kt
    load_factor = load_factor_from_bank(45.0)
    assert agrees(load_factor, "1.41")
    assert agrees(stall_speed_at_load_factor(50.0, load_factor), "59.5")
    assert agrees(stall_speed_at_load_factor(50.0, load_factor), "59.460")


def test_worked_example_of_mass() -> None:
    # examination question on CS-23, quoted: 181 kt at 5.7 t is 154 kt at 4.1 t
    assert agrees(stall_speed_at_load_factor(181.0, 1.0, 4.1 / 5.7), "154")
    assert agrees(stall_speed_at_load_factor(181.0, 1.0, 4.1 / 5.7), "153.509")


def test_constructed_example_of_mass_and_bank() -> None:
    assert agrees(stall_speed_at_load_factor(12.0, load_factor_from_bank(45.0), 1.1), "14.9670")


@pytest.mark.parametrize(
    ("mass_ratio", "root"), [(0.8, "0.89443"), (0.9, "0.94868"), (1.1, "1.04881"), (1.2, "1.09545")]
)
def test_mass_ratios(mass_ratio: float, root: str) -> None:
    assert agrees(stall_speed_at_load_factor(1.0, 1.0, mass_ratio), root)


@pytest.mark.parametrize(
    ("true_airspeed", "bank", "turn_rate", "radius", "circle"),
    # closed form: tan(bank) = V omega / g, R = V^2 / (g tan(bank)); V is the true airspeed
    [
        (15.0, 30.0, "21.6268", "39.740", "16.646"),
        (20.0, 30.0, "16.2201", "70.648", "22.195"),
        (20.0, 45.0, "28.0940", "40.789", "12.814"),
        (25.0, 45.0, "22.4752", "63.732", "16.018"),
        (50.0, 30.0, "6.4880", "441.550", "55.487"),
    ],
)
def test_turn_table(true_airspeed: float, bank: float, turn_rate: str, radius: str, circle: str) -> None:
    rate = turn_rate_from_bank(true_airspeed, bank)
    assert agrees(rate, turn_rate)
    assert agrees(turn_radius_from_bank(true_airspeed, bank), radius)
    assert agrees(turn_radius_from_turn_rate(true_airspeed, rate), radius)
    assert agrees(360.0 / rate, circle)
    assert load_factor_from_turn_rate(true_airspeed, rate) == pytest.approx(
        float(load_factor_from_bank(bank)), rel=1e-12
    )


def test_rule_of_thumb_in_knots() -> None:
    # FAA rule, quoted: rate in deg/s = 1091 tan(bank) / V in knots, where the closed form gives 1092.2
    factor = float(turn_rate_from_bank(100.0 * KNOT_MPS, 45.0)) * 100.0
    assert factor == pytest.approx(1091.0, rel=1.2e-3)
    assert agrees(factor, "1092.2")
    assert factor == pytest.approx(np.rad2deg(STANDARD_GRAVITY_MPS2 / KNOT_MPS), rel=1e-12)

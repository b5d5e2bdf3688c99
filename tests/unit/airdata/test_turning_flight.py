import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.airdata.atmosphere import standard_pressure_from_altitude
from service.airdata.constants import SEA_LEVEL_DENSITY_KGPM3, STANDARD_GRAVITY_MPS2
from service.airdata.pitot import equivalent_from_calibrated_airspeed
from service.airdata.turning_flight import (
    bank_from_load_factor,
    bank_from_turn_rate,
    load_factor_from_bank,
    load_factor_from_turn_rate,
    stall_speed_at_load_factor,
    stall_speed_from_wing,
    turn_radius_from_bank,
    turn_radius_from_turn_rate,
    turn_rate_from_bank,
)
from tests.unit.airdata.property_settings import repeatable

banks = st.floats(-80.0, 80.0)
airspeeds = st.floats(5.0, 100.0)


@repeatable
@given(airspeeds, banks)
def test_bank_and_turn_rate_round_trip(airspeed: float, bank: float) -> None:
    rate = turn_rate_from_bank(airspeed, bank)
    assert bank_from_turn_rate(airspeed, rate) == pytest.approx(bank, abs=1e-11)
    assert load_factor_from_turn_rate(airspeed, rate) == pytest.approx(float(load_factor_from_bank(bank)), rel=1e-12)
    assert turn_radius_from_turn_rate(airspeed, rate) == pytest.approx(
        float(turn_radius_from_bank(airspeed, bank)), rel=1e-12
    )


@repeatable
@given(st.floats(1.0, 10.0))
def test_load_factor_and_bank_round_trip(load_factor: float) -> None:
    assert load_factor_from_bank(bank_from_load_factor(load_factor)) == pytest.approx(load_factor, rel=1e-12)


def test_left_turns_are_negative_and_load_alike() -> None:
    assert turn_rate_from_bank(20.0, -30.0) == -turn_rate_from_bank(20.0, 30.0)
    assert bank_from_turn_rate(20.0, -16.0) == -bank_from_turn_rate(20.0, 16.0)
    assert load_factor_from_bank(-30.0) == load_factor_from_bank(30.0)
    assert turn_radius_from_bank(20.0, -30.0) == turn_radius_from_bank(20.0, 30.0)


def test_wings_level() -> None:
    assert load_factor_from_bank(0.0) == 1.0
    assert load_factor_from_turn_rate(20.0, 0.0) == 1.0
    assert bank_from_turn_rate(20.0, 0.0) == 0.0
    assert turn_rate_from_bank(20.0, 0.0) == 0.0
    assert turn_radius_from_bank(20.0, 0.0) == np.inf
    assert turn_radius_from_turn_rate(20.0, 0.0) == np.inf


def test_what_no_level_turn_can_be_is_refused() -> None:
    assert np.isnan(load_factor_from_bank([90.0, -90.0, 120.0, 270.0])).all()
    assert np.isnan(bank_from_load_factor([0.99, 0.0, -1.0])).all()
    assert np.isnan(turn_rate_from_bank([0.0, -5.0], 30.0)).all()
    assert np.isnan(turn_radius_from_bank([0.0, -5.0], 30.0)).all()


def test_stall_speed_follows_load_and_mass() -> None:
    assert stall_speed_at_load_factor(12.0, 1.0) == 12.0
    assert stall_speed_at_load_factor(12.0, 4.0) == 24.0
    assert stall_speed_at_load_factor(12.0, 1.0, 4.0) == 24.0
    assert stall_speed_at_load_factor(12.0, 0.0) == 0.0
    np.testing.assert_array_equal(stall_speed_at_load_factor(12.0, [0.25, 1.0, 2.25]), [6.0, 12.0, 18.0])


def test_stall_speed_says_nothing_where_the_wing_lifts_down() -> None:
    assert np.isnan(stall_speed_at_load_factor(12.0, -0.5))
    assert np.isnan(stall_speed_at_load_factor(12.0, 1.0, [0.0, -1.0])).all()


def test_stall_speed_from_wing_carries_the_weight() -> None:
    mass, area, lift_coefficient = 6.4, 0.55, 1.3
    speed = float(stall_speed_from_wing(mass, area, lift_coefficient))
    lift = 0.5 * SEA_LEVEL_DENSITY_KGPM3 * speed**2 * area * lift_coefficient
    assert lift == pytest.approx(mass * STANDARD_GRAVITY_MPS2, rel=1e-14)
    assert speed == pytest.approx(11.97, abs=0.01)
    # the same wing at another mass, by either way
    assert stall_speed_from_wing(1.2 * mass, area, lift_coefficient) == pytest.approx(
        float(stall_speed_at_load_factor(speed, 1.0, 1.2)), rel=1e-14
    )
    assert np.isnan(stall_speed_from_wing([0.0, 6.4, 6.4], [0.5, -0.5, 0.5], [1.3, 1.3, 0.0])).all()


def test_equivalent_stall_speed_may_be_taken_for_calibrated() -> None:
    # as the docstring of stall_speed_from_wing says
    calibrated = np.array([8.0, 12.0, 20.0, 30.0])
    equivalent = equivalent_from_calibrated_airspeed(calibrated, standard_pressure_from_altitude(1500.0))
    np.testing.assert_allclose(equivalent, calibrated, rtol=2e-4)

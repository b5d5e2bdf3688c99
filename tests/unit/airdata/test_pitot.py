from collections.abc import Callable
from decimal import Decimal, localcontext

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.airdata.atmosphere import dry_air_density_from_pressure, speed_of_sound_from_temperature
from service.airdata.constants import (
    SEA_LEVEL_DENSITY_KGPM3,
    SEA_LEVEL_PRESSURE_PA,
    SEA_LEVEL_SPEED_OF_SOUND_MPS,
    SEA_LEVEL_TEMPERATURE_K,
)
from service.airdata.pitot import (
    calibrated_airspeed_from_impact_pressure,
    calibrated_airspeed_from_mach,
    calibrated_airspeed_slope,
    calibrated_from_equivalent_airspeed,
    calibrated_from_true_airspeed,
    equivalent_airspeed_from_impact_pressure,
    equivalent_airspeed_from_mach,
    equivalent_from_calibrated_airspeed,
    equivalent_from_true_airspeed,
    impact_pressure_from_calibrated_airspeed,
    impact_pressure_from_equivalent_airspeed,
    impact_pressure_from_mach,
    impact_pressure_from_true_airspeed,
    mach_from_calibrated_airspeed,
    mach_from_equivalent_airspeed,
    mach_from_impact_pressure,
    mach_from_true_airspeed,
    true_airspeed_from_impact_pressure,
    true_airspeed_from_mach,
    true_airspeed_slope,
    true_from_calibrated_airspeed,
    true_from_equivalent_airspeed,
)
from service.domain.arrays import FloatArray
from tests.unit.airdata.property_settings import repeatable

ROUND_TRIP = 1e-12
SLOWEST_MACH = 0.01 / 340.0
machs = st.floats(np.log(SLOWEST_MACH), np.log(0.99)).map(lambda log_mach: float(np.exp(log_mach)))
pressures = st.floats(5500.0, 110000.0)
# below sea level an aircraft near Mach 1 flies beyond the greatest calibrated airspeed
pressures_to_sea_level = st.floats(5500.0, SEA_LEVEL_PRESSURE_PA)
temperatures = st.floats(200.0, 325.0)

# each pair goes from a Mach number to another quantity and back, at a static pressure and a temperature
Pair = tuple[Callable[..., FloatArray], Callable[..., FloatArray]]
FROM_MACH: dict[str, Pair] = {
    "impact pressure": (impact_pressure_from_mach, mach_from_impact_pressure),
    "equivalent": (equivalent_airspeed_from_mach, mach_from_equivalent_airspeed),
    "calibrated": (calibrated_airspeed_from_mach, mach_from_calibrated_airspeed),
    "true": (true_airspeed_from_mach, mach_from_true_airspeed),
}
FROM_TRUE: dict[str, Pair] = {
    "impact pressure": (impact_pressure_from_true_airspeed, true_airspeed_from_impact_pressure),
    "equivalent": (equivalent_from_true_airspeed, true_from_equivalent_airspeed),
    "calibrated": (calibrated_from_true_airspeed, true_from_calibrated_airspeed),
}
FROM_EQUIVALENT: dict[str, Pair] = {
    "impact pressure": (impact_pressure_from_equivalent_airspeed, equivalent_airspeed_from_impact_pressure),
    "calibrated": (calibrated_from_equivalent_airspeed, equivalent_from_calibrated_airspeed),
}


@pytest.mark.parametrize("pair", FROM_MACH.values(), ids=FROM_MACH.keys())
@repeatable
@given(machs, pressures_to_sea_level, temperatures)
def test_round_trips_from_mach(pair: Pair, mach: float, pressure_pa: float, temperature_k: float) -> None:
    there, back = pair
    beside = temperature_k if there is true_airspeed_from_mach else pressure_pa
    assert back(there(mach, beside), beside) == pytest.approx(mach, rel=ROUND_TRIP)


@pytest.mark.parametrize("pair", FROM_TRUE.values(), ids=FROM_TRUE.keys())
@repeatable
@given(machs, pressures_to_sea_level, temperatures)
def test_round_trips_from_true(pair: Pair, mach: float, pressure_pa: float, temperature_k: float) -> None:
    there, back = pair
    true = float(true_airspeed_from_mach(mach, temperature_k))
    there_and_back = back(there(true, pressure_pa, temperature_k), pressure_pa, temperature_k)
    assert there_and_back == pytest.approx(true, rel=ROUND_TRIP)


@pytest.mark.parametrize("pair", FROM_EQUIVALENT.values(), ids=FROM_EQUIVALENT.keys())
@repeatable
@given(machs, pressures_to_sea_level)
def test_round_trips_from_equivalent(pair: Pair, mach: float, pressure_pa: float) -> None:
    there, back = pair
    equivalent = float(equivalent_airspeed_from_mach(mach, pressure_pa))
    assert back(there(equivalent, pressure_pa), pressure_pa) == pytest.approx(equivalent, rel=ROUND_TRIP)


@repeatable
@given(st.floats(np.log(1e-9), np.log(8e4)).map(lambda log_pressure: float(np.exp(log_pressure))))
def test_impact_pressure_round_trips_through_calibrated_airspeed(impact_pressure_pa: float) -> None:
    calibrated = calibrated_airspeed_from_impact_pressure(impact_pressure_pa)
    assert impact_pressure_from_calibrated_airspeed(calibrated) == pytest.approx(impact_pressure_pa, rel=ROUND_TRIP)


@pytest.mark.parametrize("exponent", range(-12, 0))
def test_full_precision_at_the_smallest_pressures(exponent: int) -> None:
    ratio = 8.9 * 10.0**exponent
    with localcontext() as context:
        context.prec = 50
        root = ((1 + Decimal(ratio)).ln() * 2 / 7).exp() - 1
        exact_mach = float((5 * root).sqrt())
        stagnation = ((1 + Decimal(exact_mach) ** 2 / 5).ln() * 7 / 2).exp() - 1
        exact_ratio = float(stagnation)
    assert mach_from_impact_pressure(ratio, 1.0) == pytest.approx(exact_mach, rel=1e-15)
    assert impact_pressure_from_mach(exact_mach, 1.0) == pytest.approx(exact_ratio, rel=1e-15)


def test_airspeeds_grow_with_impact_pressure() -> None:
    impact = np.concatenate([[0.0], np.geomspace(1e-9, 8e4, 2000)])
    assert (np.diff(calibrated_airspeed_from_impact_pressure(impact)) > 0.0).all()
    assert (np.diff(true_airspeed_from_impact_pressure(impact, 95000.0, 284.0)) > 0.0).all()
    assert (np.diff(equivalent_airspeed_from_impact_pressure(impact, 95000.0)) > 0.0).all()


def test_all_airspeeds_are_one_at_standard_sea_level() -> None:
    calibrated = np.array([0.01, 5.0, 17.0, 120.0, 300.0])
    pressure, temperature = SEA_LEVEL_PRESSURE_PA, SEA_LEVEL_TEMPERATURE_K
    np.testing.assert_allclose(equivalent_from_calibrated_airspeed(calibrated, pressure), calibrated, rtol=ROUND_TRIP)
    np.testing.assert_allclose(
        true_from_calibrated_airspeed(calibrated, pressure, temperature), calibrated, rtol=ROUND_TRIP
    )


@repeatable
@given(machs, pressures, temperatures)
def test_equivalent_airspeed_carries_the_density(mach: float, pressure_pa: float, temperature_k: float) -> None:
    true = true_airspeed_from_mach(mach, temperature_k)
    sigma = dry_air_density_from_pressure(pressure_pa, temperature_k) / SEA_LEVEL_DENSITY_KGPM3
    assert equivalent_from_true_airspeed(true, pressure_pa, temperature_k) == pytest.approx(
        float(true * np.sqrt(sigma)), rel=ROUND_TRIP
    )


def test_negative_impact_pressure_gives_airspeed_zero() -> None:
    impact = np.array([-1e-12, -0.0, 0.0, -5.0, -200.0, -2e5])
    np.testing.assert_array_equal(calibrated_airspeed_from_impact_pressure(impact), np.zeros(6))
    np.testing.assert_array_equal(true_airspeed_from_impact_pressure(impact, 95000.0, 284.0), np.zeros(6))
    np.testing.assert_array_equal(equivalent_airspeed_from_impact_pressure(impact, 95000.0), np.zeros(6))
    np.testing.assert_array_equal(true_airspeed_slope(impact, 95000.0, 284.0), np.zeros(6))
    np.testing.assert_array_equal(calibrated_airspeed_slope(impact), np.zeros(6))


def test_nan_is_not_taken_for_zero() -> None:
    airspeed = calibrated_airspeed_from_impact_pressure([np.nan, -1.0, 250.0])
    assert np.isnan(airspeed[0])
    assert airspeed[1] == 0.0
    assert airspeed[2] > 0.0
    assert np.isnan(true_airspeed_slope([np.nan, 250.0], [95000.0, np.nan], 284.0)).all()


def test_mach_one_and_beyond_is_refused() -> None:
    sonic = SEA_LEVEL_PRESSURE_PA * (1.2**3.5 - 1.0)
    assert calibrated_airspeed_from_impact_pressure(0.999 * sonic) < SEA_LEVEL_SPEED_OF_SOUND_MPS
    assert np.isnan(calibrated_airspeed_from_impact_pressure([1.000001 * sonic, 10.0 * sonic, np.inf])).all()
    assert np.isnan(calibrated_airspeed_slope(1.000001 * sonic))
    assert np.isnan(impact_pressure_from_mach([1.0, 1.5], 1e5)).all()
    assert np.isnan(true_airspeed_from_mach([1.0, 1.5], 280.0)).all()
    assert np.isnan(impact_pressure_from_true_airspeed(350.0, 1e5, 280.0))


def test_negative_airspeeds_are_refused() -> None:
    assert np.isnan(impact_pressure_from_calibrated_airspeed(-10.0))
    assert np.isnan(impact_pressure_from_true_airspeed(-10.0, 95000.0, 284.0))
    assert np.isnan(impact_pressure_from_equivalent_airspeed(-10.0, 95000.0))
    assert impact_pressure_from_calibrated_airspeed(0.0) == 0.0


@pytest.mark.parametrize("bad", [0.0, -1.0, np.nan, np.inf])
def test_impossible_pressure_and_temperature_are_refused(bad: float) -> None:
    assert np.isnan(true_airspeed_from_impact_pressure(250.0, bad, 284.0))
    assert np.isnan(true_airspeed_from_impact_pressure(250.0, 95000.0, bad))
    assert np.isnan(true_airspeed_from_impact_pressure(-250.0, bad, 284.0))
    assert np.isnan(impact_pressure_from_mach(0.1, bad))


@repeatable
@given(machs, pressures, temperatures)
def test_slope_is_the_derivative(mach: float, pressure_pa: float, temperature_k: float) -> None:
    impact = float(impact_pressure_from_mach(mach, pressure_pa))
    step = 1e-5
    up, down = impact * np.exp(step), impact * np.exp(-step)
    difference = (
        true_airspeed_from_impact_pressure(up, pressure_pa, temperature_k)
        - true_airspeed_from_impact_pressure(down, pressure_pa, temperature_k)
    ) / (2.0 * step)
    assert true_airspeed_slope(impact, pressure_pa, temperature_k) == pytest.approx(float(difference), rel=1e-8)


def test_slope_with_respect_to_static_pressure_and_temperature() -> None:
    # as the docstring says, for those who carry these uncertainties
    impact, pressure, temperature, step = 900.0, 80000.0, 270.0, 1e-5
    slope = true_airspeed_slope(impact, pressure, temperature)

    def by_difference(of: Callable[[float], FloatArray]) -> float:
        return float(of(np.exp(step)) - of(np.exp(-step))) / (2.0 * step)

    by_pressure = by_difference(lambda x: true_airspeed_from_impact_pressure(impact, pressure * x, temperature))
    by_temperature = by_difference(lambda x: true_airspeed_from_impact_pressure(impact, pressure, temperature * x))
    assert by_pressure == pytest.approx(-float(slope), rel=1e-8)
    true = float(true_airspeed_from_impact_pressure(impact, pressure, temperature))
    assert by_temperature == pytest.approx(0.5 * true, rel=1e-8)


def test_slope_is_half_the_airspeed_less_the_compressibility() -> None:
    mach = np.array([1e-5, 0.01, 0.05, 0.1])
    impact = impact_pressure_from_mach(mach, 95000.0)
    ratio = true_airspeed_slope(impact, 95000.0, 284.0) / true_airspeed_from_mach(mach, 284.0)
    np.testing.assert_allclose(ratio, 0.5 * (1.0 - mach**2 / 4.0), rtol=2e-5)
    assert ratio[0] == pytest.approx(0.5, rel=1e-9)


def test_calibrated_slope_is_the_true_one_at_sea_level() -> None:
    impact = np.array([0.1, 60.0, 250.0, 20000.0])
    np.testing.assert_allclose(
        calibrated_airspeed_slope(impact),
        true_airspeed_slope(impact, SEA_LEVEL_PRESSURE_PA, SEA_LEVEL_TEMPERATURE_K),
        rtol=1e-15,
    )


@pytest.mark.parametrize(
    ("airspeed", "pressure_pa", "ratio_error"),
    # method notes: the ratio of true airspeeds differs from the root of the pressure scale by 7e-5 at 20 m/s,
    # 4e-4 at 50 m/s and 2000 m, 1.7e-3 at 100 m/s
    [(20.0, 95460.8, 7e-5), (50.0, 79495.2, 4e-4), (100.0, 101325.0, 1.7e-3)],
)
def test_pressure_scale_is_nearly_the_square_of_the_speed_scale(
    airspeed: float, pressure_pa: float, ratio_error: float
) -> None:
    scale, temperature = 1.18, 280.0
    impact = impact_pressure_from_true_airspeed(airspeed, pressure_pa, temperature)
    uncorrected = true_airspeed_from_impact_pressure(impact / scale, pressure_pa, temperature)
    error = abs(airspeed / uncorrected / np.sqrt(scale) - 1.0)
    assert 0.4 * ratio_error < error < 1.2 * ratio_error


def test_airspeed_follows_bernoulli_when_slow() -> None:
    pressure, temperature = 95000.0, 284.0
    density = dry_air_density_from_pressure(pressure, temperature)
    impact = np.array([1e-6, 1e-3, 0.1])
    np.testing.assert_allclose(
        true_airspeed_from_impact_pressure(impact, pressure, temperature), np.sqrt(2.0 * impact / density), rtol=1e-6
    )


def test_true_airspeed_is_mach_times_the_speed_of_sound() -> None:
    mach = mach_from_impact_pressure(1500.0, 70000.0)
    assert true_airspeed_from_impact_pressure(1500.0, 70000.0, 260.0) == pytest.approx(
        float(mach * speed_of_sound_from_temperature(260.0)), rel=1e-15
    )

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from service.domain.arrays import BoolArray, FloatArray
from service.fleet.between_flights import ASSUMED_FOR_ONE_FLIGHT, PRIOR_MEDIAN
from service.fleet.mixtures import NORMAL_95
from service.fleet.pooling import SPARED, heterogeneity, pool, pool_logs
from tests.unit.fleet.made import by_quadrature, flights, sound


def none_apart(count: int) -> BoolArray:
    return np.zeros(count, dtype=np.bool_)


def half_width(interval: tuple[float, float]) -> float:
    return (interval[1] - interval[0]) / 2


# --- few flights ------------------------------------------------------------------------------------------------------


def test_one_flight_is_widened_by_the_tau_assumed() -> None:
    pooled = pool_logs(np.array([-0.06]), np.array([0.004]))
    reach = NORMAL_95 * np.hypot(0.004, ASSUMED_FOR_ONE_FLIGHT)
    assert pooled.mean == -0.06
    assert pooled.interval_95 == pytest.approx((-0.06 - reach, -0.06 + reach), abs=1e-9)
    assert half_width(pooled.next_flight_95) == pytest.approx(np.sqrt(2) * reach, rel=1e-6)
    factor = pool(flights([-0.06], 0.004), none_apart(1))
    assert factor.between_flights is None
    assert factor.heterogeneity is None


def chance_below(end: float, spread: float) -> Callable[[float, FloatArray, FloatArray], float]:
    """Of a quantity of variance tau^2 + spread^2 about the mean; of the mean itself if `spread` is below zero."""

    def asked(tau: float, mean: FloatArray, covariance: FloatArray) -> float:
        beside = 0.0 if spread < 0 else tau**2 + spread**2
        return float(stats.norm.cdf(end, mean[0], np.sqrt(covariance[0, 0] + beside)))

    return asked


def test_two_flights_have_the_interval_of_the_posterior() -> None:
    log_scale, uncertainty = np.array([-0.061, -0.049]), np.array([0.004, 0.007])
    pooled = pool_logs(log_scale, uncertainty)
    mean_square = float(np.sqrt(np.mean(uncertainty**2)))
    for ends, spread in ((pooled.interval_95, -1.0), (pooled.next_flight_95, mean_square)):
        for end, probability in zip(ends, (0.025, 0.975), strict=True):
            asked = chance_below(end, spread)
            level = np.ones((2, 1))
            below = by_quadrature(log_scale, uncertainty, level, asked, PRIOR_MEDIAN)
            assert below == pytest.approx(probability, abs=6e-4)


def test_three_flights_far_apart_are_held_by_the_posterior() -> None:
    """Student's factor of two degrees of freedom alone would make 4.3 standard errors of it."""
    log_scale, uncertainty = np.array([-0.03, 0.0, 0.03]), np.full(3, 0.005)
    pooled = pool_logs(log_scale, uncertainty)
    assert half_width(pooled.interval_95) < 0.9 * stats.t.ppf(0.975, 2) * 0.03 / np.sqrt(3)
    below = by_quadrature(
        log_scale, uncertainty, np.ones((3, 1)), chance_below(pooled.interval_95[0], -1.0), PRIOR_MEDIAN
    )
    assert below == pytest.approx(0.0125, abs=4e-4)


# --- limits -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("count", [3, 10, 1000])
def test_equal_flights_have_the_fixed_effect_interval(count: int) -> None:
    pooled = pool_logs(np.full(count, -0.06), np.full(count, 0.005))
    assert pooled.mean == pytest.approx(-0.06, abs=1e-15)
    assert pooled.weights == pytest.approx(np.full(count, 1 / count))
    assert half_width(pooled.interval_95) == pytest.approx(NORMAL_95 * 0.005 / np.sqrt(count), rel=1e-9)
    assert half_width(pooled.next_flight_95) == pytest.approx(NORMAL_95 * 0.005 * np.sqrt(1 + 1 / count), rel=1e-9)


def test_scatter_far_above_the_uncertainties_gives_students_intervals() -> None:
    log_scale = sound(12, 5, deviation=0.02)
    pooled = pool_logs(log_scale, np.full(12, 1e-5))
    textbook = stats.t.interval(0.95, 11, log_scale.mean(), stats.sem(log_scale))
    assert pooled.interval_95 == pytest.approx(textbook, rel=1e-4)
    reach = stats.t.ppf(0.975, 11) * log_scale.std(ddof=1) * np.sqrt(1 + 1 / 12)
    assert half_width(pooled.next_flight_95) == pytest.approx(reach, rel=1e-4)


def test_what_is_spared() -> None:
    """Flights of one uncertainty u: Student's factor on (scatter - SPARED / (n - 1) u^2) / n."""
    log_scale, uncertainty, count = sound(20, 6, deviation=0.01), 0.005, 20
    variance = (log_scale.var(ddof=1) - SPARED / (count - 1) * uncertainty**2) / count
    pooled = pool_logs(log_scale, np.full(count, uncertainty))
    assert half_width(pooled.interval_95) == pytest.approx(stats.t.ppf(0.975, 19) * np.sqrt(variance), rel=1e-9)


def test_thousand_flights() -> None:
    rng = np.random.default_rng(8)
    uncertainty = rng.uniform(0.002, 0.009, 1000)
    pooled = pool_logs(rng.normal(-0.06, np.hypot(uncertainty, 0.005)), uncertainty)
    best = 1 / np.sqrt(np.sum(1 / (uncertainty**2 + 0.005**2)))
    assert half_width(pooled.interval_95) == pytest.approx(NORMAL_95 * best, rel=0.05)
    assert pooled.mean == pytest.approx(-0.06, abs=4 * best)


@pytest.mark.parametrize("count", [1, 2, 3, 30])
@pytest.mark.parametrize("uncertainty", [1e-12, 1e-6, 0.5, 30.0, 1e4])
def test_uncertainties_out_of_all_measure(count: int, uncertainty: float) -> None:
    factor = pool(flights(sound(count, 4), uncertainty), none_apart(count))
    low, high = factor.speed_scale.interval_95
    assert low <= factor.speed_scale.value <= high
    assert np.all(np.isfinite([low, high, *factor.pressure_scale.interval_95, *factor.next_flight.interval_95]))
    assert sum(share.weight for share in factor.flights) == pytest.approx(1.0)


def test_a_flight_that_knows_nothing_hardly_counts() -> None:
    log_scale = np.append(sound(6, 7), 1.5)
    alone, beside = (pool_logs(log_scale[:n], np.append(np.full(6, 0.005), 5.0)[:n]) for n in (6, 7))
    assert beside.weights[-1] < 1e-4
    assert beside.mean == pytest.approx(alone.mean, abs=1e-5)


# --- what must be so whatever the flights say -------------------------------------------------------------------------

SCALES = st.lists(
    st.tuples(st.floats(-0.2, 0.2), st.floats(0.0005, 0.05)),
    min_size=1,
    max_size=12,
)


@given(SCALES)
def test_interval_is_never_narrower_than_the_fixed_effect_one(pairs: list[tuple[float, float]]) -> None:
    log_scale, uncertainty = np.array(pairs).T
    pooled = pool_logs(log_scale, uncertainty)
    least = NORMAL_95 / np.sqrt(np.sum(uncertainty**-2))
    low, high = pooled.interval_95
    assert low <= pooled.mean <= high
    assert (high - low) / 2 >= least * (1 - 1e-9)
    assert half_width(pooled.next_flight_95) > half_width(pooled.interval_95)
    assert pooled.weights.sum() == pytest.approx(1.0)
    assert log_scale.min() - 1e-12 <= pooled.mean <= log_scale.max() + 1e-12


@given(SCALES, st.floats(-0.5, 0.5))
def test_another_nominal_scale_shifts_everything(pairs: list[tuple[float, float]], shift: float) -> None:
    log_scale, uncertainty = np.array(pairs).T
    here, there = pool_logs(log_scale, uncertainty), pool_logs(log_scale + shift, uncertainty)
    assert there.mean - here.mean == pytest.approx(shift, abs=1e-9)
    assert np.subtract(there.interval_95, here.interval_95) == pytest.approx(np.full(2, shift), abs=1e-7)


@given(SCALES)
def test_probes_that_err_the_other_way_have_the_mirrored_answer(pairs: list[tuple[float, float]]) -> None:
    log_scale, uncertainty = np.array(pairs).T
    here, there = pool_logs(log_scale, uncertainty), pool_logs(-log_scale, uncertainty)
    assert there.interval_95 == pytest.approx((-here.interval_95[1], -here.interval_95[0]), abs=1e-7)


# --- the record -------------------------------------------------------------------------------------------------------


def test_scales_of_speed_and_pressure() -> None:
    log_scale = sound(6, 9)
    factor = pool(flights(log_scale), none_apart(6))
    logs = pool_logs(log_scale, np.full(6, 0.005))
    assert factor.speed_scale.value == pytest.approx(np.exp(logs.mean))
    assert factor.speed_scale.interval_95 == pytest.approx(np.exp(logs.interval_95))
    assert factor.pressure_scale.value == pytest.approx(factor.speed_scale.value**2)
    assert factor.pressure_scale.interval_95 == pytest.approx(np.square(factor.speed_scale.interval_95))
    assert factor.next_flight.interval_95 == pytest.approx(np.exp(logs.next_flight_95))
    relative = half_width(logs.interval_95) / NORMAL_95
    assert factor.speed_scale.standard_uncertainty == pytest.approx(relative * factor.speed_scale.value)
    assert factor.pressure_scale.standard_uncertainty == pytest.approx(2 * relative * factor.pressure_scale.value)


def test_flights_apart_have_no_weight_and_no_say() -> None:
    log_scale = sound(6, 10)
    log_scale[2] += 0.3
    apart = np.arange(6) == 2
    factor, without = pool(flights(log_scale), apart), pool(flights(np.delete(log_scale, 2)), none_apart(5))
    assert factor.speed_scale == without.speed_scale
    assert [share.apart for share in factor.flights] == apart.tolist()
    assert factor.flights[2].weight == 0.0
    assert [share.flight for share in factor.flights] == [f"flight {number}" for number in range(1, 7)]


def test_heterogeneity_of_flights_of_one_uncertainty() -> None:
    log_scale = sound(8, 11)
    found = heterogeneity(log_scale, np.full(8, 0.005))
    assert found.statistic == pytest.approx(7 * log_scale.var(ddof=1) / 0.005**2)
    assert found.degrees_of_freedom == 7
    assert found.chance == pytest.approx(stats.chi2.sf(found.statistic, 7))

"""Estimates from mixtures of normals, and the wind's speed and direction."""

import numpy as np
import pytest
from scipy import stats

from service.domain.results import Estimate
from service.reduction.fit.mixtures import mixture_estimate, mixture_quantile, normal_estimate, wind_from_components


def test_one_normal_is_a_mixture() -> None:
    estimate = mixture_estimate(np.array([1.0]), np.array([3.0]), np.array([0.5]))
    plain = normal_estimate(3.0, 0.5)
    assert estimate.value == pytest.approx(plain.value)
    assert estimate.standard_uncertainty == pytest.approx(plain.standard_uncertainty)
    assert estimate.interval_95 == pytest.approx(plain.interval_95, abs=1e-9)
    assert plain.interval_95 == pytest.approx([3.0 - 0.979982, 3.0 + 0.979982], abs=1e-6)


def test_quantiles_and_moments_of_a_mixture() -> None:
    weight, mean, deviation = np.array([0.3, 0.7]), np.array([-1.0, 2.0]), np.array([0.5, 1.5])
    for probability in (0.025, 0.5, 0.9):
        at = mixture_quantile(weight, mean, deviation, probability)
        assert weight @ stats.norm.cdf(at, mean, deviation) == pytest.approx(probability, abs=1e-9)
    estimate = mixture_estimate(weight, mean, deviation)
    assert estimate.value == pytest.approx(1.1)
    assert estimate.standard_uncertainty**2 == pytest.approx(0.3 * (0.25 + 2.1**2) + 0.7 * (2.25 + 0.9**2))


def test_direction_is_where_the_wind_comes_from() -> None:
    wind = wind_from_components(normal_estimate(-2.5, 0.1), normal_estimate(4.0, 0.1))
    assert wind.speed_mps.value == pytest.approx(4.716991, abs=1e-6)
    assert wind.from_deg is not None
    assert wind.from_deg.value == pytest.approx(302.00538, abs=1e-5)
    assert wind.speed_mps.standard_uncertainty == pytest.approx(0.1)
    assert wind.from_deg.standard_uncertainty == pytest.approx(np.degrees(0.1 / 4.716991), rel=1e-6)


def test_uncertainty_along_and_across_the_wind() -> None:
    wind = wind_from_components(normal_estimate(5.0, 0.3), normal_estimate(0.0, 0.1))
    assert wind.speed_mps.standard_uncertainty == pytest.approx(0.3)
    assert wind.from_deg is not None
    assert wind.from_deg.standard_uncertainty == pytest.approx(np.degrees(0.1 / 5.0))


@pytest.mark.parametrize("north", [0.0, 0.1])
def test_no_direction_of_a_wind_that_may_be_none(north: float) -> None:
    wind = wind_from_components(normal_estimate(north, 0.2), normal_estimate(0.0, 0.2))
    assert wind.from_deg is None
    assert wind.speed_mps.interval_95[0] == 0.0


def test_the_speed_takes_over_the_wider_tails() -> None:
    wide = Estimate(6.0, 0.2, (5.4, 6.6))
    wind = wind_from_components(wide, wide)
    assert wind.speed_mps.interval_95[1] - wind.speed_mps.value == pytest.approx(3.0 * 0.2)

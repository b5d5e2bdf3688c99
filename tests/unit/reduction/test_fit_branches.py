"""Zeros tried where one linear fit will not do, and the mixture of the answers."""

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from service.reduction.fit.branches import Branch, joined, zeros_to_try
from service.reduction.fit.gust_posterior import GustPosterior
from service.reduction.fit.start import OffsetPrior, State


def branch(zero_pa: float, deviation_pa: float, log_scale: float = 0.0, weight: float = 1.0) -> Branch:
    covariance = np.zeros((1, 7, 7))
    covariance[0, 0, 0], covariance[0, 1, 1] = 1e-4, deviation_pa**2
    one: FloatArray = np.ones(1)
    posterior = GustPosterior(
        weight=one,
        intensity_mps=0.4 * one,
        noise_mps=0.05 * one,
        length_m=200.0 * one,
        mean=np.zeros((1, 7)),
        covariance=covariance,
        target_mean=np.zeros((1, 2, 2)),
        target_variance=np.full((1, 2, 2), 0.01),
    )
    state = State(log_scale, zero_pa, 0.2, np.array([[3.0, -1.0]]))
    return Branch(weight, state, posterior, np.ones(1), 17.0, 0.5, 1.0)


def moments(rule: list[tuple[float, float]]) -> tuple[float, float]:
    zeros, shares = (np.array(column) for column in zip(*rule, strict=True))
    assert shares.sum() == pytest.approx(1.0, abs=5e-3)
    shares = shares / shares.sum()
    mean = float(shares @ zeros)
    return mean, float(np.sqrt(shares @ (zeros - mean) ** 2))


def test_a_zero_that_is_known_needs_no_rule() -> None:
    assert zeros_to_try(OffsetPrior(0.0, 1.0), branch(0.0, 1.0), 180.0) == []


def test_the_rule_has_the_moments_of_a_normal_zero() -> None:
    assert moments(zeros_to_try(OffsetPrior(0.0, 150.0), branch(40.0, 12.0), 220.0)) == pytest.approx((40.0, 12.0))


def test_the_rule_has_the_moments_of_a_rectangle_that_the_data_do_not_narrow() -> None:
    # GUM 4.3.7: half width over the square root of 3
    prior = OffsetPrior(90.0, 30.0 / 3.0**0.5, rectangular=True)
    rule = zeros_to_try(prior, branch(90.0, prior.standard_uncertainty_pa), 260.0)
    assert moments(rule) == pytest.approx((90.0, 30.0 / 3.0**0.5), rel=1e-6)
    assert all(60.0 < zero < 120.0 for zero, _ in rule)


def test_what_the_data_say_moves_the_shares_within_the_rectangle() -> None:
    prior = OffsetPrior(90.0, 30.0 / 3.0**0.5, rectangular=True)
    # a normal prior of that width, and data of 10 Pa of uncertainty at 110 Pa
    precision = prior.standard_uncertainty_pa**-2 + 10.0**-2
    mean = (90.0 * prior.standard_uncertainty_pa**-2 + 110.0 * 10.0**-2) / precision
    found, _ = moments(zeros_to_try(prior, branch(mean, precision**-0.5), 260.0))
    at = np.linspace(60.0, 120.0, 6001)
    density = np.exp(-0.5 * ((at - 110.0) / 10.0) ** 2)
    assert found == pytest.approx(float(density @ at / density.sum()), abs=0.5)


def test_no_zero_leaves_less_than_a_tenth_of_the_reading() -> None:
    prior = OffsetPrior(90.0, 30.0 / 3.0**0.5, rectangular=True)
    rule = zeros_to_try(prior, branch(90.0, prior.standard_uncertainty_pa), 110.0)
    assert rule
    assert max(zero for zero, _ in rule) < 99.0


def test_the_mixture_holds_the_spread_between_its_branches() -> None:
    mixed = joined([branch(70.0, 1.0, -0.1, 0.25), branch(110.0, 1.0, 0.1, 0.75)])
    value, deviation = mixed.moments(mixed.zero_offset_pa, mixed.covariance[:, 1, 1])
    assert value == pytest.approx(100.0)
    assert deviation == pytest.approx(np.sqrt(1.0 + 0.25 * 30.0**2 + 0.75 * 10.0**2))
    common = mixed.common_variance(mixed.log_scale, mixed.zero_offset_pa, mixed.covariance[:, 0, 1])
    assert common == pytest.approx(0.25 * -0.15 * -30.0 + 0.75 * 0.05 * 10.0)
    assert mixed.mean_wind_mps[:, :, 0] == pytest.approx(3.0)

import numpy as np
import pytest

from service.fleet.between_flights import (
    ASSUMED_FOR_ONE_FLIGHT,
    PRIOR_MEDIAN,
    deviation_estimate,
    nodes_for,
    posterior,
    tallies,
)
from tests.unit.fleet.made import by_quadrature, sound

UNCERTAINTY = np.array([0.004, 0.002, 0.009, 0.006, 0.003])
LOG_SCALE = np.array([-0.061, -0.055, -0.049, -0.070, -0.058])


def test_half_of_the_prior_lies_below_its_median() -> None:
    nodes = nodes_for(LOG_SCALE, UNCERTAINTY)
    mass = np.exp(nodes.log_prior)
    below = np.interp(PRIOR_MEDIAN, nodes.edge[1:], np.cumsum(mass))
    # the half-Cauchy goes on where the grid ends
    on_the_grid = 2 / np.pi * np.arctan(nodes.edge[-1] / PRIOR_MEDIAN)
    assert below / mass.sum() == pytest.approx(0.5 / on_the_grid, abs=2e-4)


@pytest.mark.parametrize("count", [2, 3, 5])
def test_posterior_by_quadrature(count: int) -> None:
    log_scale, uncertainty = LOG_SCALE[:count], UNCERTAINTY[:count]
    nodes = nodes_for(log_scale, uncertainty)
    known = posterior(tallies(log_scale, uncertainty, nodes).sum(axis=0), nodes)
    level = np.ones((count, 1))
    mean = by_quadrature(log_scale, uncertainty, level, lambda _, b, __: b[0], PRIOR_MEDIAN)
    assert known.weight @ known.mean == pytest.approx(mean, abs=2e-6)
    small = by_quadrature(log_scale, uncertainty, level, lambda tau, *_: float(tau < 0.006), PRIOR_MEDIAN)
    assert np.interp(0.006, nodes.edge, np.append(0.0, np.cumsum(known.weight))) == pytest.approx(small, abs=2e-3)


def test_sums_of_tallies_are_all_that_counts() -> None:
    nodes = nodes_for(LOG_SCALE, UNCERTAINTY)
    each = tallies(LOG_SCALE, UNCERTAINTY, nodes)
    forwards, backwards = (posterior(some.sum(axis=0), nodes) for some in (each, each[::-1]))
    assert forwards.weight == pytest.approx(backwards.weight, abs=1e-12)
    several = posterior(np.stack([each[:2].sum(axis=0), each.sum(axis=0)]), nodes)
    assert several.weight.shape == (2, len(nodes.deviation))
    assert several.mean[1] == pytest.approx(forwards.mean)


def test_one_flight_has_a_tau_assumed() -> None:
    nodes = nodes_for(LOG_SCALE[:1], UNCERTAINTY[:1])
    assert nodes.deviation.tolist() == [ASSUMED_FOR_ONE_FLIGHT]


def test_flights_that_agree_may_differ_by_nothing() -> None:
    for count in (2, 5, 30):
        log_scale, uncertainty = np.full(count, -0.06), np.full(count, 0.005)
        nodes = nodes_for(log_scale, uncertainty)
        known = posterior(tallies(log_scale + 0.06, uncertainty, nodes).sum(axis=0), nodes)
        estimate = deviation_estimate(known.weight, nodes)
        assert estimate.interval_95[0] == 0.0
        assert 0 < estimate.value < estimate.interval_95[1]


@pytest.mark.parametrize("deviation", [0.002, 0.015, 0.2])
def test_many_flights_tell_tau(deviation: float) -> None:
    count = 1000
    log_scale, uncertainty = sound(count, 3, deviation), np.full(count, 0.005)
    nodes = nodes_for(log_scale, uncertainty)
    known = posterior(tallies(log_scale + 0.06, uncertainty, nodes).sum(axis=0), nodes)
    low, high = deviation_estimate(known.weight, nodes).interval_95
    assert low < deviation < high
    # the variance of n values is known to sqrt(2 / n), and what is not tau is taken off
    assert high - low == pytest.approx(2 * 1.96 * (deviation**2 + 0.005**2) / deviation / np.sqrt(2 * count), rel=0.3)

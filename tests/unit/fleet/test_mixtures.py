import numpy as np
import pytest
from scipy import stats

from service.fleet.mixtures import NORMAL_95, normal_deviate, quantiles, two_sided_chance

WEIGHT, MEAN, DEVIATION = np.array([0.2, 0.5, 0.3]), np.array([-1.0, 0.5, 2.0]), np.array([0.4, 1.0, 3.0])


@pytest.mark.parametrize("unit", [1e-9, 1.0, 1e6])
@pytest.mark.parametrize("level", [0.5, 0.95, 0.975])
def test_quantiles_leave_the_tails_outside(unit: float, level: float) -> None:
    low, high = quantiles(WEIGHT, unit * MEAN, unit * DEVIATION, level)
    for end, probability in ((low, 0.5 - level / 2), (high, 0.5 + level / 2)):
        assert WEIGHT @ stats.norm.cdf(end / unit, MEAN, DEVIATION) == pytest.approx(probability, abs=1e-8)


def test_quantiles_of_one_normal_beside_components_of_no_weight() -> None:
    low, high = quantiles(np.array([1.0, 1e-30]), np.array([3.0, 0.0]), np.array([2.0, 1e9]), 0.95)
    assert (low, high) == pytest.approx((3 - 2 * NORMAL_95, 3 + 2 * NORMAL_95), abs=1e-7)
    assert pytest.approx(1.959964, abs=1e-6) == NORMAL_95


def test_chance_is_twice_the_smaller_tail() -> None:
    at = np.array([-4.0, 0.3, 9.0])
    below = np.array([WEIGHT @ stats.norm.cdf(x, MEAN, DEVIATION) for x in at])
    assert two_sided_chance(WEIGHT, MEAN, DEVIATION, at) == pytest.approx(2 * np.minimum(below, 1 - below), rel=1e-9)


def test_chance_far_out_keeps_its_digits_and_never_passes_one() -> None:
    one = np.ones(1)
    assert two_sided_chance(one, 0 * one, one, np.array(-9.0)) == pytest.approx(2 * stats.norm.sf(9.0), rel=1e-9)
    assert two_sided_chance(one, 0 * one, one, np.array(9.0)) == pytest.approx(2 * stats.norm.sf(9.0), rel=1e-9)
    assert two_sided_chance(one, 0 * one, one, np.array(0.0)) == 1.0


@pytest.mark.parametrize("deviate", [-2.5, -0.1, 0.1, 2.5, 8.0])
def test_deviate_of_a_chance(deviate: float) -> None:
    assert normal_deviate(2 * stats.norm.sf(abs(deviate)), deviate) == pytest.approx(deviate, rel=1e-9)


def test_deviate_of_no_chance_at_all_is_finite() -> None:
    assert 30 < normal_deviate(0.0, 1.0) < 40

from datetime import timedelta

import numpy as np
import pytest
from scipy import stats

from service.domain.arrays import FloatArray
from service.fleet.between_flights import PRIOR_MEDIAN
from service.fleet.changes import UNTOLD_CHANGE, UNTOLD_DRIFT, compare_newest, find_drift
from tests.unit.fleet.made import by_quadrature, flights, sound

UNCERTAINTY = np.array([0.004, 0.002, 0.009, 0.006, 0.003, 0.005])
LOG_SCALE = np.array([-0.061, -0.055, -0.049, -0.070, -0.058, -0.041])
DAYS = np.array([0.0, 1.0, 9.0, 30.0, 31.0, 45.0])


# --- the newest flight ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("earlier", [0, 1, 2])
def test_fewer_than_three_earlier_flights_tell_nothing(earlier: int) -> None:
    made = flights([0.0] * earlier + [0.5])
    assert compare_newest(made[:-1], made[-1]) == UNTOLD_CHANGE


@pytest.mark.parametrize("earlier", [3, 5])
def test_chance_of_the_newest_by_quadrature(earlier: int) -> None:
    made = flights(np.append(LOG_SCALE[:earlier], LOG_SCALE[-1]), np.append(UNCERTAINTY[:earlier], UNCERTAINTY[-1]))
    found = compare_newest(made[:-1], made[-1])

    def above(tau: float, mean: FloatArray, covariance: FloatArray) -> float:
        return float(stats.norm.sf(LOG_SCALE[-1], mean[0], np.sqrt(covariance[0, 0] + tau**2 + UNCERTAINTY[-1] ** 2)))

    level = np.ones((earlier, 1))
    chance = 2 * by_quadrature(LOG_SCALE[:earlier], UNCERTAINTY[:earlier], level, above, PRIOR_MEDIAN)
    assert found.chance == pytest.approx(chance, rel=5e-3)
    assert found.statistic == pytest.approx(stats.norm.isf(chance / 2), rel=5e-3)


@pytest.mark.parametrize("step", [-0.05, 0.05])
def test_a_probe_that_has_changed_by_five_per_cent(step: float) -> None:
    log_scale = sound(11, 1)
    log_scale[-1] = -0.06 + step
    made = flights(log_scale)
    found = compare_newest(made[:-1], made[-1])
    assert found.disagrees
    assert found.flight == "flight 11"
    assert found.chance is not None
    assert found.chance < 1e-3
    assert found.difference is not None
    assert found.difference.value == pytest.approx(step, abs=0.006)
    assert found.statistic is not None
    assert np.sign(found.statistic) == np.sign(step)
    assert not found.difference.interval_95[0] < 0 < found.difference.interval_95[1]


def test_an_uncertain_newest_flight_may_differ() -> None:
    log_scale = np.append(sound(10, 2), -0.01)
    made = flights(log_scale, np.append(np.full(10, 0.005), 0.04))
    assert not compare_newest(made[:-1], made[-1]).disagrees


def test_the_same_again_has_every_chance() -> None:
    made = flights([-0.06] * 5)
    found = compare_newest(made[:-1], made[-1])
    assert found.chance == pytest.approx(1.0)
    assert found.difference is not None
    assert found.difference.value == pytest.approx(0.0, abs=1e-12)


def test_a_newest_flight_off_by_a_factor_of_many() -> None:
    made = flights(np.append(sound(30, 3), 4.0))
    found = compare_newest(made[:-1], made[-1])
    assert found.disagrees
    assert found.statistic is not None
    assert np.isfinite(found.statistic)


# --- drift ------------------------------------------------------------------------------------------------------------


def test_too_few_flights_or_all_at_once_tell_no_drift() -> None:
    assert find_drift([]) == UNTOLD_DRIFT
    assert find_drift(flights([0.0, 0.1, 0.2])) == UNTOLD_DRIFT
    assert find_drift(flights([0.0, 0.1, 0.2, 0.3], days=[5.0] * 4)) == UNTOLD_DRIFT


def test_chance_of_drift_by_quadrature() -> None:
    found = find_drift(flights(LOG_SCALE, UNCERTAINTY, DAYS))
    design = np.column_stack([np.ones(6), DAYS / DAYS[-1]])

    def below_zero(_: float, line: FloatArray, covariance: FloatArray) -> float:
        return float(stats.norm.cdf(0.0, line[1], np.sqrt(covariance[1, 1])))

    chance = 2 * by_quadrature(LOG_SCALE, UNCERTAINTY, design, below_zero, PRIOR_MEDIAN)
    assert found.chance == pytest.approx(chance, rel=5e-3)
    slope = by_quadrature(LOG_SCALE, UNCERTAINTY, design, lambda _, line, __: line[1], PRIOR_MEDIAN)
    assert found.change is not None
    assert found.change.value == pytest.approx(slope, rel=1e-3)
    assert found.change_per_year is not None
    assert found.change_per_year.value == pytest.approx(slope * 365.25 / 45.0, rel=1e-3)


@pytest.mark.parametrize("slope", [-0.04, 0.04])
def test_a_scale_that_moves_is_found(slope: float) -> None:
    log_scale = sound(30, 4) + slope * np.linspace(0, 1, 30)
    found = find_drift(flights(log_scale))
    assert found.drifts
    assert found.change is not None
    assert found.change.interval_95[0] < slope < found.change.interval_95[1]
    assert found.statistic is not None
    assert np.sign(found.statistic) == np.sign(slope)


def test_a_scale_that_stays_drifts_not() -> None:
    found = find_drift(flights(sound(30, 5)))
    assert not found.drifts
    assert find_drift(flights([-0.06] * 30)).chance == pytest.approx(1.0)


def test_neither_the_calendar_nor_the_nominal_scale_matters() -> None:
    made = flights(LOG_SCALE, UNCERTAINTY, DAYS)
    slow = flights(LOG_SCALE + 0.3, UNCERTAINTY, 100 * DAYS)
    one, other = find_drift(made), find_drift(slow)
    assert other.chance == pytest.approx(one.chance, rel=1e-9)
    assert one.change_per_year is not None
    assert other.change_per_year is not None
    assert one.change_per_year.value == pytest.approx(100 * other.change_per_year.value, rel=1e-9)
    assert slow[-1].flown_utc - slow[0].flown_utc == timedelta(days=4500)

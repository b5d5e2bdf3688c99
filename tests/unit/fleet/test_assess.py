import warnings
from dataclasses import replace

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from service.fleet.assess import assess
from service.fleet.changes import UNTOLD_CHANGE, UNTOLD_DRIFT
from service.fleet.records import PooledFactor, Recommendation
from tests.unit.fleet.made import flights, sound


def pool_of(log_scale: FloatArray | list[float], **given: float) -> PooledFactor:
    found = assess(flights(log_scale), **given).pool
    assert found is not None
    return found


def test_no_flight() -> None:
    found = assess([])
    assert found.pool is None
    assert (found.newest, found.drift) == (UNTOLD_CHANGE, UNTOLD_DRIFT)
    assert found.advice.recommendation is Recommendation.FLY_MORE


def test_order_of_the_input_does_not_matter() -> None:
    made = flights(sound(9, 1))
    assert assess(reversed(made)) == assess(made)


def test_flights_of_one_instant_go_by_their_names() -> None:
    made = [replace(flight, flown_utc=flights([0.0])[0].flown_utc) for flight in flights(sound(5, 2))]
    found = assess(reversed(made))
    assert found.newest.flight == "flight 5"
    assert found.drift == UNTOLD_DRIFT


@pytest.mark.parametrize("bad", [0, 4, 9])
def test_one_bad_flight_does_not_spoil_the_pool(bad: int) -> None:
    """At the end it is the newest that disagrees, before it is one apart: the pool is that of the others."""
    log_scale = sound(10, 13)
    log_scale[bad] = 0.01
    spoilt, clean = pool_of(log_scale), pool_of(np.delete(log_scale, bad))
    assert spoilt.speed_scale == clean.speed_scale
    assert spoilt.next_flight == clean.next_flight
    found = assess(flights(log_scale))
    assert found.advice.recommendation is Recommendation.CHECK_PROBE
    assert found.advice.flights == (f"flight {bad + 1}",)
    assert f"flight {bad + 1}" in found.advice.words.lower()
    assert found.newest.disagrees == (bad == 9)


def test_a_changed_probe_stays_called_out_while_more_flights_come() -> None:
    log_scale = np.append(sound(8, 4), sound(6, 5, mean=0.0))
    for count in range(9, 15):
        found = assess(flights(log_scale[:count]))
        assert found.newest.disagrees
        assert found.advice.recommendation is Recommendation.CHECK_PROBE
        assert found.advice.flights == tuple(f"flight {number}" for number in range(9, count + 1))
        assert found.pool is not None
        assert found.pool.speed_scale == pool_of(log_scale[:8]).speed_scale


def test_a_flight_held_back_returns_when_others_are_like_it() -> None:
    """Three flights happen to agree closely and the fourth does not; then it turns out that flights scatter so."""
    scatter = [-0.060, -0.0601, -0.0599, -0.0602, -0.0598, -0.015]
    later = [-0.085, -0.03, -0.09, -0.025, -0.08, -0.035]
    first, more = (assess(flights(some, 0.002)) for some in (scatter, [-0.06, *later[:5], *scatter]))
    assert first.newest.disagrees
    assert more.pool is not None
    assert not any(share.apart for share in more.pool.flights)


def test_a_slow_drift_is_called_out() -> None:
    found = assess(flights(sound(30, 6) + np.linspace(0.0, 0.03, 30)))
    assert found.drift.drifts
    assert found.advice.recommendation is Recommendation.CHECK_PROBE
    assert "from the first flight to the last" in found.advice.words


@pytest.mark.parametrize(
    ("loaded", "recommendation"),
    [
        (None, Recommendation.LOAD_AFTER_VERIFICATION),
        (1.0, Recommendation.LOAD_AFTER_VERIFICATION),
        (0.9418, Recommendation.KEEP),
    ],
)
def test_the_factor_in_use(loaded: float | None, recommendation: Recommendation) -> None:
    found = assess(flights(sound(10, 7)), loaded_speed_scale=loaded)
    assert found.advice.recommendation is recommendation


def test_thousand_flights_and_none_warns() -> None:
    rng = np.random.default_rng(8)
    uncertainty = rng.uniform(0.002, 0.009, 1000)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = assess(flights(rng.normal(-0.06, np.hypot(uncertainty, 0.005)), uncertainty))
    assert found.pool is not None
    low, high = found.pool.speed_scale.interval_95
    assert low < np.exp(-0.06) < high
    assert high - low < 0.002

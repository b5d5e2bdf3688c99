import numpy as np
import pytest

from service.domain.results import Estimate
from service.fleet.advice import advise
from service.fleet.changes import UNTOLD_CHANGE, UNTOLD_DRIFT
from service.fleet.pooling import pool
from service.fleet.records import Advice, ChangeTest, DriftTest, PooledFactor, Recommendation
from tests.unit.fleet.made import flights, sound

DISAGREES = ChangeTest("flight 8", Estimate(0.043, 0.008, (0.027, 0.059)), 4.1, 1e-5, disagrees=True)
MOVES = Estimate(-0.021, 0.004, (-0.029, -0.013))
DRIFTS = DriftTest(MOVES, MOVES, -4.0, 1e-4, drifts=True)


def pool_of(count: int, apart: tuple[int, ...] = (), uncertainty: float = 0.005) -> PooledFactor:
    return pool(flights(sound(count, 1), uncertainty), np.isin(np.arange(count), apart))


def advice_on(
    factor: PooledFactor | None,
    newest: ChangeTest = UNTOLD_CHANGE,
    drift: DriftTest = UNTOLD_DRIFT,
    loaded: float | None = None,
    wanted: float = 0.015,
) -> Advice:
    return advise(factor, newest, drift, loaded_speed_scale=loaded, accepted_half_width=wanted)


@pytest.mark.parametrize(
    ("count", "words"),
    [(1, "1.5 % is assumed. Fly at least two more"), (2, "Fly at least one more")],
)
def test_few_flights(count: int, words: str) -> None:
    found = advice_on(pool_of(count), wanted=1.0)
    assert found.recommendation is Recommendation.FLY_MORE
    assert words in found.words


def test_a_wide_interval_wants_more_flights_and_says_how_wide() -> None:
    factor = pool_of(6)
    low, high = factor.speed_scale.interval_95
    found = advice_on(factor, wanted=0.49 * (high - low))
    assert found.recommendation is Recommendation.FLY_MORE
    assert f"{(high - low) / 2:.4f} only" in found.words
    assert advice_on(factor, wanted=0.51 * (high - low)).recommendation is Recommendation.LOAD_AFTER_VERIFICATION


def test_load_names_factor_interval_and_number_of_flights() -> None:
    factor = pool_of(6)
    found = advice_on(factor)
    low, high = factor.speed_scale.interval_95
    assert found.recommendation is Recommendation.LOAD_AFTER_VERIFICATION
    for part in (f"{factor.speed_scale.value:.4f}", f"{low:.4f} to {high:.4f}", "6 flights", "verification in flight"):
        assert part in found.words


def test_a_factor_within_the_interval_is_kept() -> None:
    factor = pool_of(6)
    low, high = factor.speed_scale.interval_95
    for loaded in (low, high):
        found = advice_on(factor, loaded=loaded)
        assert found.recommendation is Recommendation.KEEP
        assert f"{loaded:.4f}" in found.words
    for loaded in (low - 1e-6, high + 1e-6):
        assert advice_on(factor, loaded=loaded).recommendation is Recommendation.LOAD_AFTER_VERIFICATION


def test_a_newest_flight_at_odds_is_named_with_its_difference() -> None:
    found = advice_on(pool_of(8, apart=(7,)), newest=DISAGREES)
    assert found.recommendation is Recommendation.CHECK_PROBE
    assert found.flights == ("flight 8",)
    assert "flight 8, disagrees with those before it by +4.3 %" in found.words
    assert "apart from the others" not in found.words
    assert f"{pool_of(8, apart=(7,)).speed_scale.value:.4f} is that of the others" in found.words


def test_flights_apart_are_named_beside_the_newest() -> None:
    found = advice_on(pool_of(8, apart=(2, 4, 7)), newest=DISAGREES)
    assert found.flights == ("flight 3", "flight 5", "flight 8")
    assert "Flights flight 3, flight 5 stand apart" in found.words


def test_many_flights_apart_are_counted() -> None:
    found = advice_on(pool_of(12, apart=tuple(range(5, 12))))
    assert "7 flights, flight 6 to flight 12, stand apart" in found.words
    assert len(found.flights) == 7


def test_a_drift_comes_before_everything_else() -> None:
    found = advice_on(pool_of(8), drift=DRIFTS, loaded=pool_of(8).speed_scale.value)
    assert found.recommendation is Recommendation.CHECK_PROBE
    assert found.flights == ()
    assert "moved by -2.1 %" in found.words
    assert "Exclude" not in found.words

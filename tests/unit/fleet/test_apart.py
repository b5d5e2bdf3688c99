from collections.abc import Sequence

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from service.fleet.apart import flights_apart
from tests.unit.fleet.made import flights, sound


def apart_before_the_last(log_scale: Sequence[float] | FloatArray) -> list[int]:
    """Which of the flights, the last being the newest."""
    return [int(at) for at in np.flatnonzero(flights_apart(flights(log_scale)))]


@pytest.mark.parametrize("bad", range(12))
@pytest.mark.parametrize("off", [-0.06, 0.06])
def test_one_bad_flight_is_found_wherever_it_stands(bad: int, off: float) -> None:
    log_scale = sound(12, 1)
    log_scale[bad] = -0.06 + off
    assert apart_before_the_last([*log_scale, -0.06]) == [bad]


def test_a_change_is_held_against_the_flights_before_it() -> None:
    log_scale = np.append(sound(10, 2), sound(60, 3, mean=0.0))
    for count in range(12, 71):
        assert apart_before_the_last(log_scale[:count]) == list(range(10, count - 1))


@pytest.mark.parametrize("bad", [(0, 9), (2, 14), (9, 14), (14, 15)])
def test_a_bad_flight_does_not_hide_a_later_one(bad: tuple[int, int]) -> None:
    log_scale = sound(20, 4)
    log_scale[list(bad)] = 0.0
    assert apart_before_the_last(log_scale) == list(bad)


@pytest.mark.parametrize("count", [0, 1, 2, 3, 4, 20])
def test_sound_flights_belong_together(count: int) -> None:
    apart = flights_apart(flights(sound(count + 1, 5)))
    assert apart.shape == (count,)
    assert not apart.any()


def test_the_newest_is_not_asked_about() -> None:
    assert apart_before_the_last([*sound(10, 5), 0.3]) == []


def test_three_flights_cannot_outvote_one() -> None:
    assert apart_before_the_last([0.0, 0.0, 0.5, 0.0]) == []


def test_flights_that_scatter_widely_belong_together() -> None:
    assert apart_before_the_last(sound(20, 6, deviation=0.03)) == []


def test_a_single_flight_that_many_may_have_returns_and_two_in_a_row_do_not() -> None:
    """2.8 % off is one in a few hundred by itself: held back when flown, but no wonder among sixty."""
    log_scale = sound(60, 12, deviation=0.0)
    odd = -0.06 + 3.5 * 0.005
    alone, again = log_scale.copy(), log_scale.copy()
    alone[30], again[30:32] = odd, odd
    assert apart_before_the_last(alone) == []
    assert apart_before_the_last(again) == [30, 31]


def test_uncertainties_of_very_different_size() -> None:
    """Sums without one precise flight must keep the digits of the many vague ones."""
    log_scale = np.append(sound(8, 7), [-0.06, -0.06])
    uncertainty = np.append(np.full(8, 0.3), [1e-9, 0.3])
    assert not flights_apart(flights(log_scale, uncertainty)).any()

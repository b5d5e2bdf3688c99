"""Places to wait are few, and given back."""

import pytest

from service.http.waiting import WaitingPlaces


def test_who_finds_no_place_does_not_wait() -> None:
    waiting = WaitingPlaces(places=1, longest_s=30.0)
    with waiting.place() as first, waiting.place() as second:
        assert (first, second) == (30.0, 0.0)
    with waiting.place() as again:
        assert again == 30.0


def test_a_place_comes_back_after_a_failure() -> None:
    waiting = WaitingPlaces(places=1, longest_s=30.0)
    with pytest.raises(ZeroDivisionError), waiting.place():
        _ = 1 / 0
    with waiting.place() as again:
        assert again == 30.0

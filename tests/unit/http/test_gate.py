"""Places are given, kept and given back."""

import pytest

from service.http.failures import TooBusy
from service.http.gate import Gate


def test_one_more_than_there_are_places() -> None:
    gate = Gate(places=1, wait_s=0.0)
    with gate.turn():
        with pytest.raises(TooBusy) as caught, gate.turn():
            pass
        assert int(caught.value.headers["Retry-After"]) >= 1
    with gate.turn():
        pass


def test_a_place_comes_back_after_a_failure() -> None:
    gate = Gate(places=1, wait_s=0.0)
    with pytest.raises(ZeroDivisionError), gate.turn():
        _ = 1 / 0
    with gate.turn():
        pass

"""Identifiers of flights: they sort as time does, and none comes twice."""

import itertools

from service.storage.identifiers import is_flight_id, new_flight_id


def test_they_sort_by_time() -> None:
    # milliseconds apart, and far apart, up to the last that 48 bits of milliseconds can hold
    times_s = [0.0, 0.001, 1.0, 1_700_000_000.0, 1_700_000_000.001, 4_000_000_000.0, 2**48 / 1000 - 1]
    made = [new_flight_id(at_s) for at_s in times_s]
    assert made == sorted(made)
    assert all(earlier < later for earlier, later in itertools.pairwise(made))


def test_each_is_another_even_in_one_millisecond() -> None:
    assert len({new_flight_id(1.0) for _ in range(1000)}) == 1000


def test_they_are_known_by_their_form() -> None:
    assert all(is_flight_id(new_flight_id()) for _ in range(100))
    made = new_flight_id()
    for other in (made.upper(), made[:-1], made + "0", made[:-1] + "u", made[:-1] + "\n", "8" + made[1:], made + "\n"):
        assert not is_flight_id(other)

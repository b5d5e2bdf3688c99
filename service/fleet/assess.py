"""Flights of one installation -> pooled factor, change tests, recommendation: the one door of the package."""

from collections.abc import Iterable

import numpy as np

from service.domain.arrays import BoolArray
from service.fleet.advice import advise
from service.fleet.apart import flights_apart
from service.fleet.changes import UNTOLD_CHANGE, UNTOLD_DRIFT, compare_newest, find_drift
from service.fleet.pooling import pool
from service.fleet.records import Assessment, ChangeTest, FlightFactor

ACCEPTED_HALF_WIDTH = 0.015
"""Of the interval of the speed scale, as for a single flight."""


def assess(
    flights: Iterable[FlightFactor],
    *,
    loaded_speed_scale: float | None = None,
    accepted_half_width: float = ACCEPTED_HALF_WIDTH,
) -> Assessment:
    """What the accepted flights of one installation say, in whatever order they are given.

    A flight that is at odds with the others is left out of the pool and named, the newest one as well; it comes back by
    itself when later flights show that it belongs to them.

    Parameters
    ----------
    loaded_speed_scale : the total speed scale in use now, 1 for none; None where nobody has said.
    accepted_half_width : of the pooled speed scale's interval, above which more flights are wanted.
    """
    ordered = sorted(flights, key=lambda flight: (flight.flown_utc, flight.flight))
    if not ordered:
        advice = advise(None, UNTOLD_CHANGE, UNTOLD_DRIFT, loaded_speed_scale=None, accepted_half_width=0.0)
        return Assessment(None, UNTOLD_CHANGE, UNTOLD_DRIFT, advice)
    newest, apart = _compare(ordered)
    pooled = pool(ordered, apart)
    drift = find_drift(_without(ordered, apart))
    advice = advise(
        pooled,
        newest,
        drift,
        loaded_speed_scale=loaded_speed_scale,
        accepted_half_width=accepted_half_width,
    )
    return Assessment(pooled, newest, drift, advice)


def _compare(ordered: list[FlightFactor]) -> tuple[ChangeTest, BoolArray]:
    """The newest against the earlier, and (n,) which flights stay out of the pool."""
    earlier = flights_apart(ordered)
    newest = compare_newest(_without(ordered[:-1], earlier), ordered[-1])
    return newest, np.append(earlier, newest.disagrees)


def _without(flights: list[FlightFactor], apart: BoolArray) -> list[FlightFactor]:
    return [flight for flight, left_out in zip(flights, apart, strict=True) if not left_out]

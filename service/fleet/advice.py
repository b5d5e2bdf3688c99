"""The recommendation in words."""

from service.fleet.pooling import FEWEST_FOR_SCATTER
from service.fleet.records import Advice, ChangeTest, DriftTest, PooledFactor, Recommendation

NAMED = 5
"""So many flights are named in the words at most."""


def advise(
    pool: PooledFactor | None,
    newest: ChangeTest,
    drift: DriftTest,
    *,
    loaded_speed_scale: float | None,
    accepted_half_width: float,
) -> Advice:
    """What to do. `loaded_speed_scale`: the total factor in use now, 1 for none; None where nobody has said."""
    if pool is None:
        return Advice(Recommendation.FLY_MORE, "No flight has given a factor yet.", ())
    at_odds = tuple(share.flight for share in pool.flights if share.apart)
    if at_odds or drift.drifts:
        return Advice(Recommendation.CHECK_PROBE, _check(pool, newest, drift, at_odds), at_odds)
    words = _more_wanted(pool, accepted_half_width)
    if words is not None:
        return Advice(Recommendation.FLY_MORE, words, ())
    if loaded_speed_scale is not None and _holds(pool, loaded_speed_scale):
        words = f"Keep the speed scale {loaded_speed_scale:.4f}: it lies within the interval, {_interval(pool)}."
        return Advice(Recommendation.KEEP, words, ())
    words = f"Load the speed scale {pool.speed_scale.value:.4f} ({_interval(pool)}) after verification in flight."
    return Advice(Recommendation.LOAD_AFTER_VERIFICATION, words, ())


def _check(pool: PooledFactor, newest: ChangeTest, drift: DriftTest, at_odds: tuple[str, ...]) -> str:
    told = ["Check the probe and its tubes before loading a factor."]
    earlier = at_odds
    if newest.disagrees and newest.difference is not None:
        told.append(
            f"The newest flight, {newest.flight}, disagrees with those before it by "
            f"{100 * newest.difference.value:+.1f} %, which a sound probe shows by chance in less than 1 % of flights."
        )
        earlier = at_odds[:-1]
    if earlier:
        told.append(f"{_named(earlier)} apart from the others.")
    if at_odds:
        told.append(
            f"Left out so far: the factor {pool.speed_scale.value:.4f} is that of the others. Exclude such a flight "
            "with its reason, or begin a new installation with it if the probe was changed."
        )
    if drift.drifts and drift.change is not None:
        told.append(
            f"The speed scale has moved by {100 * drift.change.value:+.1f} % from the first flight to the last: the "
            "factor is a mean of what the probe was over that time."
        )
    return " ".join(told)


def _named(flights: tuple[str, ...]) -> str:
    if len(flights) > NAMED:
        return f"{len(flights)} flights, {flights[0]} to {flights[-1]}, stand"
    return f"Flight {flights[0]} stands" if len(flights) == 1 else f"Flights {', '.join(flights)} stand"


def _more_wanted(pool: PooledFactor, accepted_half_width: float) -> str | None:
    count = len(pool.flights)
    if count == 1:
        return "One flight does not show how much flights differ; 1.5 % is assumed. Fly at least two more."
    if count < FEWEST_FOR_SCATTER:
        return "Two flights hardly show how much flights differ. Fly at least one more."
    low, high = pool.speed_scale.interval_95
    if high - low > 2 * accepted_half_width:
        return (
            f"The factor is known to {(high - low) / 2:.4f} only, {accepted_half_width:.4f} is wanted. Fly more, and "
            "look for what differs from flight to flight."
        )
    return None


def _holds(pool: PooledFactor, speed_scale: float) -> bool:
    low, high = pool.speed_scale.interval_95
    return low <= speed_scale <= high


def _interval(pool: PooledFactor) -> str:
    low, high = pool.speed_scale.interval_95
    return f"95 %: {low:.4f} to {high:.4f}, from {len(pool.flights)} flights"

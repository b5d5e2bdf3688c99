"""Has the probe changed? The newest flight against those before it, and a slow drift through all of them.

Both ask the same model as the pool (`between_flights`): what would a probe that has not changed show, tau being known
as little as it is? The chance is twice the smaller tail of the posterior predictive distribution, or of the posterior
of the slope. That chance is calibrated on average over the prior of tau; for a given tau it is up to 1.5 times too
small. So alarms are raised below `ALARM_CHANCE`, and each test then raises a false one in at most `FALSE_ALARM_RATE` of
its looks, for every tau up to 1.5 % and any number of flights (`python -m tests.fleet_campaign`). Every new flight is
another look.
"""

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.results import Estimate
from service.fleet.between_flights import Nodes, node_weights, nodes_for, posterior, tallies
from service.fleet.mixtures import NORMAL_95, normal_deviate, quantiles, two_sided_chance
from service.fleet.records import ChangeTest, DriftTest, FlightFactor

FALSE_ALARM_RATE = 0.01
"""Of each of the two tests and each look, at most; of both together 2 %."""
ALARM_CHANCE = 0.006
FEWEST_EARLIER = 3
FEWEST_FOR_DRIFT = 4
SECONDS_PER_YEAR = 365.25 * 86400
UNTOLD_CHANGE = ChangeTest(None, None, None, None, disagrees=False)
UNTOLD_DRIFT = DriftTest(None, None, None, None, drifts=False)


def compare_newest(earlier: list[FlightFactor], newest: FlightFactor) -> ChangeTest:
    """The newest flight against the earlier ones, none of which should be apart."""
    if len(earlier) < FEWEST_EARLIER:
        return UNTOLD_CHANGE
    log_scale, uncertainty = columns([*earlier, newest])
    origin = float(np.median(log_scale[:-1]))
    nodes = nodes_for(log_scale, uncertainty)
    known = posterior(tallies(log_scale[:-1] - origin, uncertainty[:-1], nodes).sum(axis=0), nodes)
    deviation = np.sqrt(known.variance + nodes.deviation**2 + uncertainty[-1] ** 2)
    found = log_scale[-1] - origin
    chance = float(two_sided_chance(known.weight, known.mean, deviation, np.array(found)))
    difference = _estimate(known.weight, found - known.mean, deviation)
    return ChangeTest(
        flight=newest.flight,
        difference=difference,
        statistic=normal_deviate(chance, difference.value),
        chance=chance,
        disagrees=chance < ALARM_CHANCE,
    )


def find_drift(flights: list[FlightFactor]) -> DriftTest:
    """A straight line in time through the flights, in their order, with tau between them."""
    if len(flights) < FEWEST_FOR_DRIFT:
        return UNTOLD_DRIFT
    start = flights[0].flown_utc
    time_s = np.array([(flight.flown_utc - start).total_seconds() for flight in flights])
    span_s = float(time_s[-1])
    if span_s == 0:
        return UNTOLD_DRIFT
    log_scale, uncertainty = columns(flights)
    nodes = nodes_for(log_scale, uncertainty)
    weight, slope, deviation = _slope(log_scale - float(np.median(log_scale)), uncertainty, time_s / span_s, nodes)
    chance = float(two_sided_chance(weight, slope, deviation, np.array(0.0)))
    change = _estimate(weight, slope, deviation)
    return DriftTest(
        change=change,
        change_per_year=_times(change, SECONDS_PER_YEAR / span_s),
        statistic=normal_deviate(chance, change.value),
        chance=chance,
        drifts=chance < ALARM_CHANCE,
    )


def columns(flights: list[FlightFactor]) -> tuple[FloatArray, FloatArray]:
    """ln scales and their uncertainties, each (n,)."""
    return (
        np.array([flight.log_scale for flight in flights]),
        np.array([flight.standard_uncertainty for flight in flights]),
    )


def _slope(
    log_scale: FloatArray, uncertainty: FloatArray, time: FloatArray, nodes: Nodes
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Weighted regression at each node: posterior weight, slope and its standard deviation, each (g,).

    Flat priors of level and slope; the restricted likelihood has the determinant of both.
    """
    weight = 1 / (uncertainty[:, np.newaxis] ** 2 + nodes.deviation**2)
    total = weight.sum(axis=0)
    x = log_scale[:, np.newaxis] - (log_scale @ weight) / total
    t = time[:, np.newaxis] - (time @ weight) / total
    lever = (weight * t**2).sum(axis=0)
    slope = (weight * t * x).sum(axis=0) / lever
    q = (weight * (x - slope * t) ** 2).sum(axis=0)
    log_likelihood = 0.5 * (np.log(weight).sum(axis=0) - np.log(total) - np.log(lever) - q)
    return node_weights(log_likelihood, nodes), slope, 1 / np.sqrt(lever)


def _estimate(weight: FloatArray, mean: FloatArray, deviation: FloatArray) -> Estimate:
    low, high = quantiles(weight, mean, deviation, 0.95)
    return Estimate(float(weight @ mean), (high - low) / (2 * NORMAL_95), (low, high))


def _times(estimate: Estimate, factor: float) -> Estimate:
    low, high = estimate.interval_95
    return Estimate(estimate.value * factor, estimate.standard_uncertainty * factor, (low * factor, high * factor))

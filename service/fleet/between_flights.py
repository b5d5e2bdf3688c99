"""The standard deviation between flights, tau: its prior, a grid of it, and its posterior.

Model of random effects: the ln scale of flight i is normal about mu with variance u_i^2 + tau^2; mu is the probe's
scale, u_i the flight's own uncertainty, and tau what flights differ by beyond it (temperature, wash of the wing, water
in a tube). Given tau everything is a weighted mean. Tau is not fitted but marginalised, mu having a flat prior: each
node of a grid has the weight of its restricted likelihood [1] times the prior, and the answers are mixtures of normals
over the nodes. That carries the doubt about tau, which with few flights is most of the doubt there is.

The prior of tau is half-Cauchy [2, 3] with its median at 1 %: flat where tau is small, and with a tail so long that few
flights which differ by more overrule it.

[1] D. A. Harville, Bayesian inference for variance components using only error contrasts, Biometrika 61 (1974).
[2] A. Gelman, Prior distributions for variance parameters in hierarchical models, Bayesian Analysis 1 (2006).
[3] N. G. Polson, J. G. Scott, On the half-Cauchy prior for a global scale parameter, Bayesian Analysis 7 (2012).
"""

from dataclasses import dataclass

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.results import Estimate
from service.fleet.mixtures import NORMAL_95

PRIOR_MEDIAN = 0.01
"""Of tau, in ln scale; also the scale of the half-Cauchy."""
ASSUMED_FOR_ONE_FLIGHT = 0.015
"""Tau where one flight stands alone, which says nothing of it: the largest that the campaign's sound fleets have."""
NODES_PER_DECADE = 30
SMALLEST_SHARE = 0.05
"""First node over the smallest uncertainty: a smaller tau adds nothing to it."""
SMALLEST = 1e-6
WIDEST = 100.0
"""Last node over the prior's median, or over the range of the flights if that is wider."""


@dataclass(frozen=True, slots=True)
class Nodes:
    """Grid of tau: zero, then even steps in ln tau. Each (g,), `edge` (g + 1,)."""

    deviation: FloatArray
    log_prior: FloatArray
    edge: FloatArray
    """Of the cells around the nodes, from zero."""


def nodes_for(log_scale: FloatArray, uncertainty: FloatArray) -> Nodes:
    """A grid that reaches from nothing to more than flights like these can tell; arrays (n,)."""
    if len(log_scale) == 1:
        edge = np.array([0.0, np.inf])
        return Nodes(np.array([ASSUMED_FOR_ONE_FLIGHT]), np.zeros(1), edge)
    first = max(SMALLEST_SHARE * float(uncertainty.min()), SMALLEST)
    last = WIDEST * max(PRIOR_MEDIAN, float(np.ptp(log_scale)), first)
    count = 2 + int(np.ceil(NODES_PER_DECADE * np.log10(last / first)))
    above_zero = np.geomspace(first, last, count)
    step = above_zero[1] / above_zero[0]
    edge = np.concatenate([[0.0], above_zero / np.sqrt(step), [last * np.sqrt(step)]])
    # the difference of two arc tangents, without loss of digits in the tail
    mass = np.arctan(np.diff(edge) * PRIOR_MEDIAN / (PRIOR_MEDIAN**2 + edge[:-1] * edge[1:]))
    return Nodes(np.concatenate([[0.0], above_zero]), np.log(mass), edge)


def tallies(log_scale: FloatArray, uncertainty: FloatArray, nodes: Nodes) -> FloatArray:
    """(n, 4, g): of each flight at each node its weight w, w x, w x^2 and ln w; sums of them are all that counts.

    x should be taken from somewhere amid the flights, or digits are lost.
    """
    weight = 1 / (uncertainty[:, np.newaxis] ** 2 + nodes.deviation**2)
    x = log_scale[:, np.newaxis]
    return np.stack([weight, weight * x, weight * x**2, np.log(weight)], axis=1)


@dataclass(frozen=True, slots=True)
class Posterior:
    """Of tau and, given tau, of mu: normal. Each (..., g)."""

    weight: FloatArray
    """Of the node; adds up to 1."""
    mean: FloatArray
    variance: FloatArray


def posterior(sums: FloatArray, nodes: Nodes) -> Posterior:
    """From sums of tallies over the flights, (..., 4, g)."""
    precision, first, second, log_weight = (sums[..., row, :] for row in range(4))
    mean = first / precision
    q = np.maximum(second - first * mean, 0.0)
    return Posterior(node_weights(0.5 * (log_weight - np.log(precision) - q), nodes), mean, 1 / precision)


def node_weights(log_likelihood: FloatArray, nodes: Nodes) -> FloatArray:
    """Normalised posterior weights of the nodes from restricted log likelihoods, (..., g)."""
    log_weight = log_likelihood + nodes.log_prior
    weight = np.exp(log_weight - log_weight.max(axis=-1, keepdims=True))
    return np.asarray(weight / weight.sum(axis=-1, keepdims=True))


def deviation_estimate(weight: FloatArray, nodes: Nodes) -> Estimate:
    """Median of tau and the shortest interval that holds 95 %; it begins at zero where the flights may well agree."""
    below = np.concatenate([[0.0], np.cumsum(weight)])
    median = float(np.interp(0.5, below, nodes.edge))
    starts = np.flatnonzero(below <= 0.05)
    ends = np.interp(below[starts] + 0.95, below, nodes.edge)
    shortest = int(np.argmin(ends - nodes.edge[starts]))
    low, high = float(nodes.edge[starts[shortest]]), float(ends[shortest])
    return Estimate(median, (high - low) / (2 * NORMAL_95), (low, high))

"""Mixtures of normals: the form that every answer takes when the deviation between flights is marginalised."""

import numpy as np
from scipy import optimize, special

from service.domain.arrays import FloatArray

NORMAL_95 = float(special.ndtri(0.975))
REACH = 12.0
"""Standard deviations of a component beyond which nothing of it is left."""
LEAST_CHANCE = 1e-300
NOTHING = 1e-9
"""Weight of a component that does not count in an interval."""


def quantiles(weight: FloatArray, mean: FloatArray, deviation: FloatArray, level: float) -> tuple[float, float]:
    """Ends of the central interval of `level`; each array (g,)."""
    # most nodes of a well known mixture carry nothing, and the widest of them would only slow the search
    some = weight > NOTHING
    weight, mean, deviation = weight[some], mean[some], deviation[some]
    low = float((mean - REACH * deviation).min())
    high = float((mean + REACH * deviation).max())

    def excess(x: float, probability: float) -> float:
        return float(weight @ special.ndtr((x - mean) / deviation)) - probability

    tails = (0.5 - level / 2, 0.5 + level / 2)
    # relative to the width, so that neither tiny nor huge uncertainties matter
    ends = [optimize.brentq(excess, low, high, args=(tail,), xtol=1e-10 * (high - low)) for tail in tails]
    return float(ends[0]), float(ends[1])


def two_sided_chance(weight: FloatArray, mean: FloatArray, deviation: FloatArray, at: FloatArray) -> FloatArray:
    """Twice the smaller tail beyond `at`. Arrays (..., g), `at` (...): (...)."""
    z = (at[..., np.newaxis] - mean) / deviation
    below = (weight * special.ndtr(z)).sum(axis=-1)
    above = (weight * special.ndtr(-z)).sum(axis=-1)
    return np.asarray(np.minimum(2 * np.minimum(below, above), 1.0))


def normal_deviate(chance: float, sign: float) -> float:
    """The standard normal deviate that has this two-sided chance, with that sign."""
    return float(np.copysign(special.ndtri(max(chance, LEAST_CHANCE) / 2), sign))

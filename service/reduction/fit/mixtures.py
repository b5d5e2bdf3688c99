"""Estimates from mixtures of normals: value, standard uncertainty and 95 % interval."""

import numpy as np
from scipy import optimize, special

from service.domain.arrays import FloatArray
from service.domain.results import Estimate, WindEstimate

TAILS = (0.025, 0.975)


def mixture_quantile(weight: FloatArray, mean: FloatArray, deviation: FloatArray, probability: float) -> float:
    """Quantile of a mixture of normals, each argument (g,)."""
    reach = 12 * deviation
    low, high = float((mean - reach).min()), float((mean + reach).max())

    def excess(x: float) -> float:
        return float(weight @ special.ndtr((x - mean) / deviation)) - probability

    return float(optimize.brentq(excess, low, high, xtol=1e-12))


def mixture_estimate(weight: FloatArray, mean: FloatArray, deviation: FloatArray) -> Estimate:
    """Mean, standard deviation and central 95 % of a mixture of normals, each argument (g,)."""
    value = float(weight @ mean)
    spread = float(np.sqrt(weight @ (deviation**2 + (mean - value) ** 2)))
    low, high = (mixture_quantile(weight, mean, deviation, tail) for tail in TAILS)
    return Estimate(value, spread, (low, high))


def normal_estimate(value: float, deviation: float) -> Estimate:
    """Estimate of a normal quantity."""
    reach = float(special.ndtri(TAILS[1])) * deviation
    return Estimate(value, deviation, (value - reach, value + reach))


def wind_from_components(north: Estimate, east: Estimate) -> WindEstimate:
    """Speed and direction of the mean wind from its components; no direction where it may be any.

    Uncertainties are carried linearly along and across the wind; the speed's interval never falls below zero.
    """
    speed = float(np.hypot(north.value, east.value))
    cosine, sine = (north.value / speed, east.value / speed) if speed > 0 else (1.0, 0.0)
    along = float(np.hypot(cosine * north.standard_uncertainty, sine * east.standard_uncertainty))
    across = float(np.hypot(sine * north.standard_uncertainty, cosine * east.standard_uncertainty))
    factor = (north.interval_95[1] - north.interval_95[0]) / (2 * max(north.standard_uncertainty, 1e-12))
    interval = (max(speed - factor * along, 0.0), speed + factor * along)
    direction: Estimate | None = None
    if speed > factor * across:
        from_deg = float(np.mod(np.degrees(np.arctan2(-east.value, -north.value)), 360.0))
        angle = float(np.degrees(across / speed))
        direction = Estimate(from_deg, angle, (from_deg - factor * angle, from_deg + factor * angle))
    return WindEstimate(north, east, Estimate(speed, along, interval), direction)

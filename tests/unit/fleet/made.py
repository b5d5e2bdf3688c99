"""Flights made for the tests of the fleet, and the posterior of tau a second time: by quadrature, with matrices."""

from collections.abc import Callable, Sequence
from datetime import UTC, datetime, timedelta

import numpy as np
from scipy import integrate

from service.domain.arrays import FloatArray
from service.fleet.records import FlightFactor

FIRST_DAY = datetime(2026, 3, 2, 10, tzinfo=UTC)


def flights(
    log_scale: Sequence[float] | FloatArray,
    uncertainty: Sequence[float] | FloatArray | float = 0.005,
    days: Sequence[float] | FloatArray | None = None,
) -> list[FlightFactor]:
    """`flight 1`, `flight 2`, ... a week apart unless `days` says otherwise."""
    count = len(log_scale)
    when = 7.0 * np.arange(count) if days is None else np.asarray(days)
    return [
        FlightFactor(f"flight {number + 1}", FIRST_DAY + timedelta(days=float(when[number])), float(x), float(u))
        for number, (x, u) in enumerate(zip(log_scale, np.broadcast_to(uncertainty, count), strict=True))
    ]


def sound(count: int, seed: int, deviation: float = 0.004, mean: float = -0.06) -> FloatArray:
    """(n,) ln scales of a probe that stays as it is, uncertainty 0.5 %."""
    return mean + np.random.default_rng(seed).normal(0.0, np.hypot(0.005, deviation), count)


def by_quadrature(
    log_scale: FloatArray,
    uncertainty: FloatArray,
    design: FloatArray,
    asked: Callable[[float, FloatArray, FloatArray], float],
    prior_median: float,
) -> float:
    """Posterior mean of `asked(tau, coefficients, their covariance)`: general least squares at each tau.

    `design` is (n, p). The restricted likelihood is written with determinants, the prior of tau is half-Cauchy.
    """

    def weighted(angle: float, ask: bool) -> float:
        # tau = median x tan(angle) makes the half-Cauchy prior even in the angle
        tau = prior_median * np.tan(angle)
        covariance = np.diag(uncertainty**2 + tau**2)
        inverse = np.linalg.inv(covariance)
        known = np.linalg.inv(design.T @ inverse @ design)
        coefficients = known @ design.T @ inverse @ log_scale
        rest = log_scale - design @ coefficients
        log_likelihood = 0.5 * (np.linalg.slogdet(known)[1] - np.linalg.slogdet(covariance)[1] - rest @ inverse @ rest)
        likelihood = float(np.exp(log_likelihood - scale))
        return likelihood * (asked(tau, coefficients, known) if ask else 1.0)

    scale = float(-np.log(uncertainty).sum())
    ends = (0.0, np.pi / 2 - 1e-9)
    numerator = integrate.quad(weighted, *ends, args=(True,), limit=400, epsabs=0.0, epsrel=1e-9)[0]
    return float(numerator / integrate.quad(weighted, *ends, args=(False,), limit=400, epsabs=0.0, epsrel=1e-9)[0])

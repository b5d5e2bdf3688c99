"""Level of the scale in any span of the fitted points, and its uncertainty in correlated gusts.

Probe airspeed minus wind-corrected ground speed is compared by generalised least squares with the covariance of a gust
field carried by the air mass. Length and life of the field are chosen by restricted likelihood (Patterson and Thompson,
Recovery of inter-block information when block sizes are unequal, Biometrika 58 (1971) 545-554); scale and winds of the
loiters, drift included, are left free; the zero offset as free as the fit left it.
"""

from dataclasses import dataclass

import numpy as np
from scipy import linalg

from service.airdata.gusts import GustGeometry
from service.domain.arrays import FloatArray
from service.domain.results import FittedPoints

MOST_POINTS = 160
LENGTHS_M = (60.0, 200.0, 600.0)
LIVES_S = (np.inf, 60.0, 15.0)
"""In which a gust at one place in the air mass is another; in still air circles meet the same gusts again and again."""
NOISE_SHARE = 0.03
"""Of the gust's variance: what GPS and sensor noise leave in a point."""
LEAST_SPEED_MPS = 1e-3
LEAST_VARIANCE = 1e-12
LEAST_STRENGTH = 1e-6
LEAST_INFORMATION = 0.01
"""Of the largest: a span that holds next to all points, or none, or all of one airspeed, tells no step."""


MOST_ZERO_DOUBT = 100.0


@dataclass(frozen=True, slots=True)
class Levels:
    """Level of every span [i, j) of the (k,) points, from the moments of its steps."""

    points: FittedPoints
    moment: FloatArray
    """(k + 1,) of the points before each boundary with the residuals."""
    information: FloatArray
    """(k + 1, k + 1)"""

    def between(
        self, opens_late: FloatArray | None = None, closes_late: FloatArray | None = None
    ) -> tuple[FloatArray, FloatArray]:
        """(k + 1, k + 1) relative step of the speed in the span from boundary i to j > i, and its variance.

        Parameters
        ----------
        opens_late, closes_late : (k + 1,), -1 to 1
            How much later than the boundary between its points a span opens or closes, in lengths of a point's average:
            a point that holds the edge itself shows a part of the step.
        """
        opening, closing = _late(self.moment.size, opens_late), _late(self.moment.size, closes_late)
        crossed = opening @ self.information @ closing.T
        information = _quadratic(opening, self.information)[:, None] + _quadratic(closing, self.information)[None, :]
        information -= 2.0 * crossed
        upper = np.triu(np.ones_like(information, dtype=bool), 1)
        upper &= information > LEAST_INFORMATION * information.max()
        safe = np.where(upper, information, 1.0)
        step = np.where(upper, ((closing @ self.moment)[None, :] - (opening @ self.moment)[:, None]) / safe, 0.0)
        return step, np.where(upper, 1.0 / safe, np.inf)


def _late(size: int, late: FloatArray | None) -> FloatArray:
    """(size, size) weights that move each boundary towards its neighbour."""
    if late is None:
        return np.eye(size)
    later, earlier = np.clip(late, 0.0, 1.0), np.clip(-late, 0.0, 1.0)
    later[-1] = earlier[0] = 0.0
    return np.asarray(np.diag(1.0 - later - earlier) + np.diag(later[:-1], 1) + np.diag(earlier[1:], -1))


def _quadratic(weights: FloatArray, matrix: FloatArray) -> FloatArray:
    return np.asarray(np.einsum("ij,ij->i", weights @ matrix, weights))


def levels_of_spans(points: FittedPoints, zero_doubt: float = 0.0) -> Levels:
    """Levels of all spans of the (k,) points, thinned.

    Parameters
    ----------
    zero_doubt : what the uncertainty of the zero offset adds to the speed, times the speed. [m2/s2]
    """
    points = _thinned(points)
    air, directions = _air_path(points)
    seconds = float(np.median(np.diff(points.time_s)))
    speed = points.wind_corrected_speed_mps
    geometry = GustGeometry(air, directions, float(np.median(speed)) * seconds)
    residual = points.probe_true_airspeed_mps - speed
    nuisance = _nuisance(points, directions)
    apart_s = np.abs(points.time_s[:, None] - points.time_s[None, :])
    usual = max(float(np.sqrt(np.mean(residual**2))), LEAST_SPEED_MPS)
    zero = zero_doubt / np.maximum(speed, LEAST_SPEED_MPS) / usual
    # beyond a hundred residuals it is as good as unknown, and larger numbers only cost digits
    zero *= min(1.0, MOST_ZERO_DOUBT / max(float(zero.max()), 1e-12))
    fixed = NOISE_SHARE * np.eye(residual.size) + np.outer(zero, zero)
    covariances = (
        geometry.covariance(length) * np.exp(-apart_s / life) + fixed for length in LENGTHS_M for life in LIVES_S
    )
    _, projector, variance = max((_generalised(c, residual, nuisance) for c in covariances), key=lambda g: g[0])
    before = np.tri(speed.size + 1, speed.size, -1).T * speed[:, None]
    weighted = projector @ before / variance
    return Levels(points, weighted.T @ residual, before.T @ weighted)


def _generalised(covariance: FloatArray, residual: FloatArray, nuisance: FloatArray) -> tuple[float, FloatArray, float]:
    """Restricted log-likelihood, projector that weighs and takes out the nuisance, and the variance of the gust."""
    factor = linalg.cho_factor(covariance, lower=True)
    inverse = linalg.cho_solve(factor, np.eye(residual.size))
    weighted = inverse @ nuisance
    gram = nuisance.T @ weighted
    projector = inverse - weighted @ np.linalg.solve(gram, weighted.T)
    freedom = residual.size - nuisance.shape[1]
    variance = max(float(residual @ projector @ residual) / max(freedom, 1), LEAST_VARIANCE)
    log_determinants = 2.0 * float(np.sum(np.log(np.diag(factor[0])))) + float(np.linalg.slogdet(gram)[1])
    return -0.5 * (freedom * np.log(variance) + log_determinants), projector, variance


def _nuisance(points: FittedPoints, directions: FloatArray) -> FloatArray:
    """(k, p) orthonormal: what a wrong scale, and a wrong, drifting wind in each loiter, add."""
    columns = [points.wind_corrected_speed_mps]
    for loiter in np.unique(points.loiter):
        inside = points.loiter == loiter
        time = points.time_s - points.time_s[inside].mean()
        half = max(float(np.ptp(points.time_s[inside])) / 2.0, 1.0)
        for shape in (np.ones_like(time), time / half):
            columns += [inside * shape * directions[:, 0], inside * shape * directions[:, 1]]
    basis, strength, _ = np.linalg.svd(np.column_stack(columns), full_matrices=False)
    # On a straight leg the wind ahead and the scale are the same thing: one direction of the space is empty.
    return np.asarray(basis[:, strength > LEAST_STRENGTH * strength[0]])


def _air_path(points: FittedPoints) -> tuple[FloatArray, FloatArray]:
    """Positions in the air mass and unit vectors of the air velocity, both (k, 2) north, east."""
    heading = np.radians(points.heading_deg)
    directions = np.column_stack([np.cos(heading), np.sin(heading)])
    velocity = directions * points.wind_corrected_speed_mps[:, None]
    step = 0.5 * (velocity[1:] + velocity[:-1]) * np.diff(points.time_s)[:, None]
    return np.vstack([np.zeros(2), np.cumsum(step, axis=0)]), directions


def _thinned(points: FittedPoints) -> FittedPoints:
    """Neighbours within a loiter joined, until no more than MOST_POINTS are left."""
    every = -(-points.time_s.size // MOST_POINTS)
    place = np.arange(points.time_s.size) - np.searchsorted(points.loiter, points.loiter)
    first = np.flatnonzero(place % every == 0)
    count = np.diff(np.concatenate([first, [points.time_s.size]]))

    def mean(values: FloatArray) -> FloatArray:
        return np.asarray(np.add.reduceat(values, first) / count)

    heading = np.radians(points.heading_deg)
    return FittedPoints(
        time_s=mean(points.time_s),
        loiter=points.loiter[first],
        heading_deg=np.degrees(np.arctan2(mean(np.sin(heading)), mean(np.cos(heading)))),
        probe_true_airspeed_mps=mean(points.probe_true_airspeed_mps),
        wind_corrected_speed_mps=mean(points.wind_corrected_speed_mps),
    )

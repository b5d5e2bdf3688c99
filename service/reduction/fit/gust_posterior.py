"""Linear model in a gust field of unknown intensity, length, life and noise: all of them marginalised on a grid.

``y = X d + eta``, with prior d ~ N(m, S) (infinite variances allowed) and eta the gust along the path, projected on the
air velocity, plus white noise. For given length and life one eigen-decomposition of the gust covariance serves every
intensity and noise. Each grid node gives a normal posterior of d and of the targets (wind averaged over path and time:
universal kriging, Matheron 1969; Cressie, Statistics for Spatial Data, 1993, section 3.4); nodes are weighted by their
restricted marginal likelihood (Harville 1974) times the prior, so that the doubt about the gust goes into the interval.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import linalg, optimize, special

from service.airdata.gusts import GustGeometry
from service.domain.arrays import FloatArray

LENGTHS_M = np.array([25.0, 50.0, 100.0, 175.0, 300.0, 550.0, 1000.0])
MEDIAN_LENGTH_M = 200.0
LENGTH_SPREAD = 0.7
"""Standard deviation of ln(length) about the median: 100 to 400 m holds two thirds (method notes, check values g)."""
LIFETIMES = (np.inf, 2.0, 0.7)
"""Life of an eddy in turn-over times length/intensity: frozen for ever, or decaying."""
INTENSITY_FACTORS = np.geomspace(0.4, 5.0, 12)
"""Gust intensities tried, in units of the residual's root mean square."""
NOISE_SHARES = np.array([0.03, 0.1, 0.2, 0.35, 0.55, 0.8, 1.05])
"""White noise of a block tried, in the same unit."""
LEAST_WEIGHT = 1e-3


@dataclass(frozen=True, slots=True)
class LinearModel:
    """y (k,) = design (k, p) @ d + eta; `prior_mean`, `prior_precision` (p,), (p, p) of d; `noise` (k,) relative variance."""

    observed: FloatArray
    design: FloatArray
    prior_mean: FloatArray
    prior_precision: FloatArray
    noise: FloatArray


@dataclass(frozen=True, slots=True)
class Target:
    """A linear function of d plus the mean gust, along `direction`, over points of the path weighted by `weights` (k,)."""

    coefficients: FloatArray
    weights: FloatArray
    direction: FloatArray


@dataclass(frozen=True, slots=True)
class GustPosterior:
    """Mixture over the g grid nodes that matter."""

    weight: FloatArray
    """(g,)"""
    intensity_mps: FloatArray
    """(g,)"""
    length_m: FloatArray
    """(g,)"""
    mean: FloatArray
    """(g, p) of d"""
    covariance: FloatArray
    """(g, p, p) of d"""
    target_mean: FloatArray
    """(g, q)"""
    target_variance: FloatArray
    """(g, q)"""

    def expected(self) -> FloatArray:
        """(p,) mean of d over the mixture."""
        return np.asarray(self.weight @ self.mean)

    def spread(self) -> FloatArray:
        """(p, p) covariance of d over the mixture."""
        off = self.mean - self.expected()
        return np.einsum("g,gpq->pq", self.weight, self.covariance) + np.einsum("g,gp,gq->pq", self.weight, off, off)


def mixture_quantile(weight: FloatArray, mean: FloatArray, deviation: FloatArray, probability: float) -> float:
    """Quantile of a mixture of normals, each argument (g,)."""
    reach = 12 * float(deviation.max())
    low, high = float(mean.min()) - reach, float(mean.max()) + reach

    def excess(x: float) -> float:
        return float(weight @ special.ndtr((x - mean) / deviation)) - probability

    return float(optimize.brentq(excess, low, high, xtol=1e-12))


def gust_posterior(
    model: LinearModel,
    geometry: GustGeometry,
    path_geometry: Sequence[GustGeometry],
    time_s: FloatArray,
    targets: Sequence[Target],
    residual_rms: float,
) -> GustPosterior:
    """Posterior of `model` and `targets`.

    Parameters
    ----------
    geometry : of the blocks' positions and air directions.
    path_geometry : between blocks (rows, projected on the air direction) and blocks projected on north and on east.
    residual_rms : scale of the grids. [m/s]
    """
    pieces = [
        _nodes(model, geometry, path_geometry, time_s, targets, residual_rms, length, lifetime)
        for length in LENGTHS_M.tolist()
        for lifetime in LIFETIMES
    ]
    evidence = np.concatenate([piece.evidence for piece in pieces])
    weight = np.exp(evidence - evidence.max())
    weight /= weight.sum()
    kept = weight > LEAST_WEIGHT * weight.max()
    offset, chosen = 0, []
    for piece in pieces:
        part = kept[offset : offset + piece.evidence.size]
        if part.any():
            chosen.append((weight[offset : offset + piece.evidence.size][part], piece.solve(np.flatnonzero(part))))
        offset += piece.evidence.size
    joined = np.concatenate([w for w, _ in chosen])
    columns = [np.concatenate([solution[k] for _, solution in chosen]) for k in range(6)]
    return GustPosterior(joined / joined.sum(), *columns)


Solution = tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]


class _nodes:
    """All intensities and noises at one length and life of the eddies."""

    def __init__(
        self,
        model: LinearModel,
        geometry: GustGeometry,
        path_geometry: Sequence[GustGeometry],
        time_s: FloatArray,
        targets: Sequence[Target],
        residual_rms: float,
        length_m: float,
        lifetime: float,
    ) -> None:
        self._length_m = length_m
        fading = _fading(time_s, lifetime * length_m / max(1.5 * residual_rms, 0.02))
        root_noise = np.sqrt(model.noise)
        covariance = geometry.covariance(length_m) * fading / np.outer(root_noise, root_noise)
        eigenvalues, vectors = linalg.eigh(covariance, check_finite=False, driver="evd")
        self._eigenvalues = np.maximum(eigenvalues, 0.0)
        centred = model.observed - model.design @ model.prior_mean
        self._y = vectors.T @ (centred / root_noise)
        self._x = vectors.T @ (model.design / root_noise[:, None])
        self._model = model
        self._targets = targets
        self._vectors = vectors
        self._cross = lambda: self._target_covariances(path_geometry, fading, root_noise)
        intensity, noise = np.meshgrid(INTENSITY_FACTORS * residual_rms, NOISE_SHARES * residual_rms, indexing="ij")
        self._intensity, self._noise = intensity.ravel(), noise.ravel()
        self._weights = 1.0 / (self._intensity[:, None] ** 2 * self._eigenvalues + self._noise[:, None] ** 2)
        self._solve_all()
        log_prior = -0.5 * (np.log(length_m / MEDIAN_LENGTH_M) / LENGTH_SPREAD) ** 2
        log_prior -= np.log(2.0) * (1 if np.isinf(lifetime) else 2)
        self.evidence = self._log_likelihood + log_prior

    def _solve_all(self) -> None:
        p = self._x.shape[1]
        products = (self._x[:, :, None] * self._x[:, None, :]).reshape(-1, p * p)
        self._gram = (self._weights @ products).reshape(-1, p, p)
        self._information = self._gram + self._model.prior_precision
        moment = self._weights @ (self._x * self._y[:, None])
        self._shift = np.linalg.solve(self._information, moment[:, :, None])[:, :, 0]
        square = self._weights @ self._y**2 - np.einsum("gp,gp->g", moment, self._shift)
        _, log_determinant = np.linalg.slogdet(self._information)
        self._log_likelihood = 0.5 * (np.log(self._weights).sum(axis=1) - log_determinant - square)

    def solve(self, nodes: FloatArray) -> Solution:
        """Intensity, length, mean, covariance of d, target means and variances at the given nodes."""
        weights, shift = self._weights[nodes], self._shift[nodes]
        covariance = np.linalg.inv(self._information[nodes])
        mean = shift + self._model.prior_mean
        cross, own = self._cross()
        intensity_square = self._intensity[nodes] ** 2
        coefficients = np.array([target.coefficients for target in self._targets])
        residual = self._y - shift @ self._x.T
        # kriging: the mean gust over the path given the residuals, and what d's doubt adds
        gust = intensity_square[:, None] * ((weights * residual) @ cross)
        leverage = coefficients[None] - intensity_square[:, None, None] * np.einsum(
            "kq,gk,kp->gqp", cross, weights, self._x, optimize=True
        )
        explained = intensity_square[:, None] ** 2 * (weights @ cross**2)
        variance = intensity_square[:, None] * own - explained
        variance = np.maximum(variance, 0.0) + np.einsum("gqp,gpr,gqr->gq", leverage, covariance, leverage)
        length = np.full(nodes.size, self._length_m)
        return self._intensity[nodes], length, mean, covariance, mean @ coefficients.T + gust, variance

    def _target_covariances(
        self, path_geometry: Sequence[GustGeometry], fading: FloatArray, root_noise: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """(k, q) covariance of residuals and target gusts in the eigenbasis, and (q,) variance of target gusts."""
        north, east, north_north, east_east = (g.covariance(self._length_m) * fading for g in path_geometry)
        cross, own = [], []
        for target in self._targets:
            is_north = target.direction[0] > 0.5
            # the residual holds minus the gust along the air velocity
            cross.append(-(north if is_north else east) @ target.weights / root_noise)
            own.append(target.weights @ (north_north if is_north else east_east) @ target.weights)
        return self._vectors.T @ np.column_stack(cross), np.array(own)


def _fading(time_s: FloatArray, life_s: float) -> FloatArray:
    if not np.isfinite(life_s):
        return np.ones((time_s.size, time_s.size))
    return np.exp(-np.abs(time_s[:, None] - time_s[None, :]) / life_s)

"""Linear model in a gust field of unknown intensity, length, life and noise: all of them marginalised on a grid.

``y = X d + eta``, with prior d ~ N(m, S) (infinite variances allowed) and eta the gust along the path, projected on the
air velocity, plus white noise. For given length and life one eigen-decomposition of the gust covariance serves every
intensity and noise. Each grid node gives a normal posterior of d and of the targets (wind averaged over path and time:
universal kriging, Matheron 1969; Cressie, Statistics for Spatial Data, 1993, section 3.4); nodes are weighted by their
restricted marginal likelihood (Harville 1974) times the prior, so that the doubt about the gust goes into the interval.
"""

from collections.abc import Sequence
from dataclasses import dataclass, fields
from itertools import product

import numpy as np
from scipy import linalg

from service.airdata.gusts import GustGeometry
from service.domain.arrays import FloatArray, IntArray

LENGTHS_M = np.array([40.0, 90.0, 200.0, 400.0, 850.0])
MEDIAN_LENGTH_M = 200.0
LENGTH_SPREAD = 0.7
"""Standard deviation of ln(length) about the median: 100 to 400 m holds two thirds (method notes, check values g)."""
LIFETIMES = (np.inf, 1.0)
"""Life of an eddy in turn-over times length/intensity: frozen for ever, or decaying; equally likely."""
INTENSITY_FACTORS = np.geomspace(0.4, 5.0, 12)
"""Gust intensities tried, in units of the residual's root mean square."""
TYPICAL_INTENSITY_FACTOR = 1.4
"""A loiter's own fit takes out part of the gust, so that the residual is smaller than the gust."""
NOISE_SHARES = np.array([0.03, 0.1, 0.2, 0.35, 0.55, 0.8, 1.05])
"""White noise of a block tried, in the same unit."""
LEAST_WEIGHT = 1e-3


@dataclass(frozen=True, slots=True)
class LinearModel:
    """Observed (k,) = design (k, p) @ d + eta; prior of d: mean (p,), precision (p, p); relative noise (k,)."""

    observed: FloatArray
    design: FloatArray
    prior_mean: FloatArray
    prior_precision: FloatArray
    noise: FloatArray
    time_s: FloatArray


@dataclass(frozen=True, slots=True)
class Target:
    """A linear function of d plus the mean gust along `axis` (0 north, 1 east) over the path, weighted by (k,)."""

    coefficients: FloatArray
    weights: FloatArray
    axis: int


@dataclass(frozen=True, slots=True)
class PathGeometry:
    """The blocks in the air mass.

    Rows of `gust`, `to_north` and `to_east` are projected on the air direction; columns likewise, on north, on east.
    """

    gust: GustGeometry
    to_north: GustGeometry
    to_east: GustGeometry
    north: GustGeometry
    east: GustGeometry


@dataclass(frozen=True, slots=True)
class GustPosterior:
    """Mixture of normals over the g grid nodes that matter: of d (p), and of the targets (q)."""

    weight: FloatArray
    """(g,)"""
    intensity_mps: FloatArray
    """(g,)"""
    noise_mps: FloatArray
    """(g,)"""
    length_m: FloatArray
    """(g,)"""
    mean: FloatArray
    """(g, p)"""
    covariance: FloatArray
    """(g, p, p)"""
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
        within = np.einsum("g,gpq->pq", self.weight, self.covariance)
        return np.asarray(within + np.einsum("g,gp,gq->pq", self.weight, off, off))


def likeliest_field(
    model: LinearModel, gust: GustGeometry, residual_rms_mps: float, length_m: float = MEDIAN_LENGTH_M
) -> tuple[float, float]:
    """Intensity and noise [m/s] of the likeliest node for a frozen field of one length."""
    nodes = _FieldNodes(model, gust, residual_rms_mps, length_m, np.inf)
    best = int(np.argmax(nodes.evidence))
    return float(nodes.intensity_mps[best]), float(nodes.noise_mps[best])


def field_evidence(
    model: LinearModel, gust: GustGeometry, intensity_mps: float, noise_mps: float, length_m: float = MEDIAN_LENGTH_M
) -> float:
    """Log restricted likelihood of `model` in one frozen field, less a constant."""
    x, y, log_determinant = _whitened(model, model.design, gust, intensity_mps, noise_mps, length_m)
    information, moment = x.T @ x + model.prior_precision, x.T @ y
    square = y @ y - moment @ np.linalg.solve(information, moment)
    return float(-0.5 * (log_determinant + np.linalg.slogdet(information)[1] + square))


def disagreement(
    model: LinearModel, extra: FloatArray, gust: GustGeometry, intensity_mps: float, noise_mps: float, length_m: float
) -> float:
    """Chi-square of the contrasts that free coefficients of `extra` (k, c) would show in one frozen field."""
    if extra.shape[1] == 0:
        return 0.0
    design = np.column_stack([model.design, extra])
    x, y, _ = _whitened(model, design, gust, intensity_mps, noise_mps, length_m)
    information = x.T @ x
    known = model.design.shape[1]
    information[:known, :known] += model.prior_precision
    covariance = np.linalg.inv(information)
    contrasts = (covariance @ (x.T @ y))[known:]
    return float(contrasts @ np.linalg.solve(covariance[known:, known:], contrasts))


def _whitened(
    model: LinearModel,
    design: FloatArray,
    gust: GustGeometry,
    intensity_mps: float,
    noise_mps: float,
    length_m: float,
) -> tuple[FloatArray, FloatArray, float]:
    """Design and centred observations freed of their covariance in one frozen field, and its log determinant."""
    covariance = intensity_mps**2 * gust.covariance(length_m) + noise_mps**2 * np.diag(model.noise)
    factor = linalg.cholesky(covariance, lower=True, check_finite=False, overwrite_a=True)
    centred = model.observed - model.design @ model.prior_mean
    white = linalg.solve_triangular(factor, np.column_stack([design, centred]), lower=True, check_finite=False)
    return white[:, :-1], white[:, -1], 2 * float(np.log(np.diag(factor)).sum())


def gust_posterior(
    model: LinearModel, path: PathGeometry, targets: Sequence[Target], residual_rms_mps: float
) -> GustPosterior:
    """Posterior of `model` and `targets` over gust fields; the grids are scaled by `residual_rms_mps`."""
    nodes = [
        _FieldNodes(model, path.gust, residual_rms_mps, length_m, life)
        for length_m, life in product(LENGTHS_M.tolist(), LIFETIMES)
    ]
    evidence = np.stack([node.evidence for node in nodes])
    weight = np.exp(evidence - evidence.max())
    weight[weight < LEAST_WEIGHT] = 0.0
    weight /= weight.sum()
    solved = [
        node.solve(np.flatnonzero(share), share[share > 0], path, targets)
        for node, share in zip(nodes, weight, strict=True)
        if share.any()
    ]
    return GustPosterior(
        **{
            field.name: np.concatenate([getattr(part, field.name) for part in solved])
            for field in fields(GustPosterior)
        }
    )


class _FieldNodes:
    """All intensities and noises for one path, length and life of the eddies."""

    def __init__(
        self, model: LinearModel, gust: GustGeometry, residual_rms_mps: float, length_m: float, life: float
    ) -> None:
        self._length_m, self._prior_mean = length_m, model.prior_mean
        self._prior_precision = model.prior_precision
        self._fading = _fading(model.time_s, life * length_m / (TYPICAL_INTENSITY_FACTOR * residual_rms_mps))
        self._root_noise = np.sqrt(model.noise)
        covariance = gust.covariance(length_m) * self._fading / np.outer(self._root_noise, self._root_noise)
        eigenvalues, self._vectors = np.linalg.eigh(covariance)
        centred = model.observed - model.design @ model.prior_mean
        self._y = self._vectors.T @ (centred / self._root_noise)
        self._x = self._vectors.T @ (model.design / self._root_noise[:, None])
        intensity, noise = np.meshgrid(INTENSITY_FACTORS, NOISE_SHARES, indexing="ij")
        self.intensity_mps, self.noise_mps = residual_rms_mps * intensity.ravel(), residual_rms_mps * noise.ravel()
        gust_variance = self.intensity_mps[:, None] ** 2 * np.maximum(eigenvalues, 0.0)
        self._precision = 1.0 / (gust_variance + self.noise_mps[:, None] ** 2)
        log_prior = -0.5 * (np.log(length_m / MEDIAN_LENGTH_M) / LENGTH_SPREAD) ** 2
        self.evidence = log_prior + self._log_likelihood()
        """(nodes,) log of prior times restricted likelihood."""

    def _log_likelihood(self) -> FloatArray:
        """(nodes,). No node keeps its information: a flight of many loiters would fill hundreds of megabytes."""
        moment = self._precision @ (self._x * self._y[:, None])
        self._shift = np.empty_like(moment)
        log_determinant = np.empty(len(moment))
        for node, pull in enumerate(moment):
            factor = linalg.cho_factor(self._information(node), overwrite_a=True, check_finite=False)
            self._shift[node] = linalg.cho_solve(factor, pull, check_finite=False)
            log_determinant[node] = 2.0 * np.log(np.diag(factor[0])).sum()
        square = self._precision @ self._y**2 - np.einsum("gp,gp->g", moment, self._shift)
        return np.asarray(0.5 * (np.log(self._precision).sum(axis=1) - log_determinant - square))

    def _information(self, node: int) -> FloatArray:
        """(p, p) precision of d at one node."""
        scaled = self._x * np.sqrt(self._precision[node])[:, None]
        return np.asarray(scaled.T @ scaled + self._prior_precision)

    def solve(
        self, nodes: IntArray, weight: FloatArray, path: PathGeometry, targets: Sequence[Target]
    ) -> GustPosterior:
        """Posterior at the given nodes, which carry `weight`."""
        precision, shift = self._precision[nodes], self._shift[nodes]
        intensity = self.intensity_mps[nodes]
        covariance = np.linalg.inv(np.stack([self._information(node) for node in nodes.tolist()]))
        cross, own = self._target_covariances(path, targets)
        coefficients = np.array([target.coefficients for target in targets])
        mean = shift + self._prior_mean
        # kriging: the mean gust over the path given the residuals, and what the doubt about d adds
        square = intensity[:, None] ** 2
        gust = square * ((precision * (self._y - shift @ self._x.T)) @ cross)
        seen = np.einsum("kq,gk,kp->gqp", cross, precision, self._x, optimize=True)
        leverage = coefficients - square[:, :, None] * seen
        unexplained = square * own - square**2 * (precision @ cross**2)
        from_d = np.einsum("gqp,gpr,gqr->gq", leverage, covariance, leverage, optimize=True)
        return GustPosterior(
            weight=weight,
            intensity_mps=intensity,
            noise_mps=self.noise_mps[nodes],
            length_m=np.full(nodes.size, self._length_m),
            mean=mean,
            covariance=covariance,
            target_mean=mean @ coefficients.T + gust,
            target_variance=np.maximum(unexplained, 0.0) + from_d,
        )

    def _target_covariances(self, path: PathGeometry, targets: Sequence[Target]) -> tuple[FloatArray, FloatArray]:
        """(k, q) covariance of residuals and target gusts in the eigenbasis, and (q,) variance of target gusts."""
        length_m = self._length_m
        across = [geometry.covariance(length_m) * self._fading for geometry in (path.to_north, path.to_east)]
        within = [geometry.covariance(length_m) * self._fading for geometry in (path.north, path.east)]
        # the residual holds minus the gust along the air velocity
        cross = np.column_stack([-across[t.axis] @ t.weights / self._root_noise for t in targets])
        own = np.array([t.weights @ within[t.axis] @ t.weights for t in targets])
        return self._vectors.T @ cross, own


def _fading(time_s: FloatArray, life_s: float) -> FloatArray:
    """(k, k) share of the gust that has lived on from one time to another."""
    if not np.isfinite(life_s):
        return np.ones((time_s.size, time_s.size))
    return np.asarray(np.exp(-np.abs(time_s[:, None] - time_s[None, :]) / life_s))

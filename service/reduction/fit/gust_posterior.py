"""Linear model in a gust field of unknown intensity, length and noise: all of them marginalised on a grid.

``y = X d + eta``, with prior d ~ N(m, S) (infinite variances allowed) and eta the gust along the path, projected on the
air velocity, plus white noise. For a given length one eigen-decomposition of the gust covariance serves every intensity
and noise. Each grid node gives a normal posterior of d and of the targets (wind averaged over path and time: universal
kriging, Matheron 1969; Cressie, Statistics for Spatial Data, 1993, section 3.4). Nodes are weighted by their restricted
marginal likelihood (Harville 1974) times the prior, which is even in the intensity (Gelman 2006), so that the doubt
about the gust goes into the interval.
"""

from collections.abc import Iterable
from dataclasses import dataclass, fields, replace

import numpy as np
from scipy import linalg

from service.airdata.gusts import GustGeometry
from service.domain.arrays import FloatArray, IntArray

LENGTHS_M = np.array([40.0, 90.0, 200.0, 400.0, 850.0])
MEDIAN_LENGTH_M = 200.0
LENGTH_SPREAD = 0.7
"""Standard deviation of ln(length) about the median: 100 to 400 m holds two thirds (method notes, check values g)."""
INTENSITY_FACTORS = np.geomspace(0.4, 5.0, 12)
"""Gust intensities tried, in units of the residual's root mean square."""
NOISE_SHARES = np.array([0.03, 0.1, 0.2, 0.35, 0.55, 0.8, 1.05])
"""White noise of a block tried, in the same unit."""
LEAST_WEIGHT = 1e-3


@dataclass(frozen=True, slots=True)
class Columns:
    """Where each parameter stands in d: ln K, zero offset, delay, winds by loiter, drifts by loiter [m/s per min]."""

    loiters: int

    @classmethod
    def of(cls, count: int) -> "Columns":
        """Of a model with `count` parameters."""
        return cls((count - 3) // 4)

    @property
    def count(self) -> int:
        return 3 + 4 * self.loiters

    def wind(self, axis: int) -> slice:
        """Wind of every loiter along one axis (0 north, 1 east)."""
        return slice(3 + axis, 3 + 2 * self.loiters, 2)

    @property
    def winds(self) -> slice:
        return slice(3, 3 + 2 * self.loiters)

    @property
    def drifts(self) -> slice:
        return slice(3 + 2 * self.loiters, self.count)


@dataclass(frozen=True, slots=True)
class LinearModel:
    """Observed (k,) = design (k, p) @ d + eta; prior of d: mean (p,), precision (p, p); relative noise (k,)."""

    observed: FloatArray
    design: FloatArray
    prior_mean: FloatArray
    prior_precision: FloatArray
    noise: FloatArray
    time_s: FloatArray

    def of_every(self, step: int) -> "LinearModel":
        """The model of each `step`-th observation alone."""
        kept = slice(None, None, step)
        return replace(
            self,
            observed=self.observed[kept],
            design=self.design[kept],
            noise=self.noise[kept],
            time_s=self.time_s[kept],
        )


@dataclass(frozen=True, slots=True)
class Targets:
    """`m` means of the wind over parts of the path, north and east each.

    Each is a linear function of d, `coefficients` (m, 2, p), plus the mean gust, `weights` (k, m).
    """

    coefficients: FloatArray
    weights: FloatArray


@dataclass(frozen=True, slots=True)
class GustPosterior:
    """Mixture of normals over the g grid nodes that matter: of d (p), and of the targets (m, 2)."""

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
    """(g, m, 2)"""
    target_variance: FloatArray
    """(g, m, 2)"""

    @property
    def winds(self) -> FloatArray:
        """(g, number of loiters, 2)"""
        return self.mean[:, Columns.of(self.mean.shape[1]).winds].reshape(len(self.mean), -1, 2)


def typical_mean(
    model: LinearModel, gust: GustGeometry, residual_rms_mps: float, length_m: float = MEDIAN_LENGTH_M
) -> FloatArray:
    """(p,) posterior mean of d in a field of one length, over intensities and noises."""
    nodes = _FieldNodes(model, gust, residual_rms_mps, length_m)
    return np.asarray(_weights([nodes])[0] @ nodes.mean)


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


def gust_posterior(model: LinearModel, gust: GustGeometry, targets: Targets, residual_rms_mps: float) -> GustPosterior:
    """Posterior of d and the targets over gust fields; the grids are scaled by `residual_rms_mps`."""
    nodes = [_FieldNodes(model, gust, residual_rms_mps, length_m) for length_m in LENGTHS_M.tolist()]
    weights = _weights(nodes)
    solved = [
        node.solve(np.flatnonzero(share), share[share > 0], targets)
        for node, share in zip(nodes, weights, strict=True)
        if share.any()
    ]
    return GustPosterior(
        **{
            field.name: np.concatenate([getattr(part, field.name) for part in solved])
            for field in fields(GustPosterior)
        }
    )


def _weights(nodes: "Iterable[_FieldNodes]") -> FloatArray:
    """(number of fields, nodes of each) share of each node; small ones are dropped."""
    evidence = np.stack([node.evidence for node in nodes])
    weight = np.exp(evidence - evidence.max())
    weight[weight < LEAST_WEIGHT] = 0.0
    return np.asarray(weight / weight.sum())


class _FieldNodes:
    """All intensities and noises for one length of the eddies."""

    def __init__(self, model: LinearModel, gust: GustGeometry, residual_rms_mps: float, length_m: float) -> None:
        self._gust, self._length_m, self._prior_mean = gust, length_m, model.prior_mean
        self._prior_precision = model.prior_precision
        self._root_noise = np.sqrt(model.noise)
        covariance = gust.covariance(length_m) / np.outer(self._root_noise, self._root_noise)
        eigenvalues, self._vectors = np.linalg.eigh(covariance)
        centred = model.observed - model.design @ model.prior_mean
        self._y = self._vectors.T @ (centred / self._root_noise)
        self._x = self._vectors.T @ (model.design / self._root_noise[:, None])
        intensity, noise = np.meshgrid(INTENSITY_FACTORS, NOISE_SHARES, indexing="ij")
        self.intensity_mps, self.noise_mps = residual_rms_mps * intensity.ravel(), residual_rms_mps * noise.ravel()
        gust_variance = self.intensity_mps[:, None] ** 2 * np.maximum(eigenvalues, 0.0)
        self._precision = 1.0 / (gust_variance + self.noise_mps[:, None] ** 2)
        log_prior = -0.5 * (np.log(length_m / MEDIAN_LENGTH_M) / LENGTH_SPREAD) ** 2
        # the nodes are even in ln(intensity); the prior is even in intensity, which is safer where few eddies were met
        self.evidence = log_prior + np.log(self.intensity_mps) + self._log_likelihood()
        """(nodes,) log of prior times restricted likelihood."""

    @property
    def mean(self) -> FloatArray:
        """(nodes, p) posterior mean of d."""
        return np.asarray(self._shift + self._prior_mean)

    def _log_likelihood(self) -> FloatArray:
        information = self._information(self._precision)
        moment = self._precision @ (self._x * self._y[:, None])
        self._shift = np.linalg.solve(information, moment[:, :, None])[:, :, 0]
        _, log_determinant = np.linalg.slogdet(information)
        square = self._precision @ self._y**2 - np.einsum("gp,gp->g", moment, self._shift)
        return np.asarray(0.5 * (np.log(self._precision).sum(axis=1) - log_determinant - square))

    def _information(self, precision: FloatArray) -> FloatArray:
        """(nodes, p, p) precision of d for (nodes, k) precisions of the residuals in the eigenbasis."""
        count = self._x.shape[1]
        row, column = np.triu_indices(count)
        information = np.empty((len(precision), count, count))
        information[:, row, column] = precision @ (self._x[:, row] * self._x[:, column])
        information[:, column, row] = information[:, row, column]
        return information + self._prior_precision

    def solve(self, nodes: IntArray, weight: FloatArray, targets: Targets) -> GustPosterior:
        """Posterior at the given nodes, which carry `weight`."""
        precision, shift = self._precision[nodes], self._shift[nodes]
        intensity = self.intensity_mps[nodes]
        covariance = np.asarray(np.linalg.inv(self._information(precision)), dtype=np.float64)
        means = targets.weights.shape[1]
        coefficients = targets.coefficients.reshape(2 * means, -1)
        cross, own = self._gust.mean_gusts(self._length_m, targets.weights)
        # the residual holds minus the gust along the air velocity
        cross = -self._vectors.T @ (cross.reshape(-1, 2 * means) / self._root_noise[:, None])
        mean = shift + self._prior_mean
        # kriging: the mean gust over the path given the residuals, and what the doubt about d adds
        square = intensity[:, None] ** 2
        gust = square * ((precision * (self._y - shift @ self._x.T)) @ cross)
        seen = np.einsum("kq,gk,kp->gqp", cross, precision, self._x, optimize=True)
        leverage = coefficients - square[:, :, None] * seen
        unexplained = square * own.ravel() - square**2 * (precision @ cross**2)
        from_d = np.einsum("gqp,gpr,gqr->gq", leverage, covariance, leverage, optimize=True)
        return GustPosterior(
            weight=weight,
            intensity_mps=intensity,
            noise_mps=self.noise_mps[nodes],
            length_m=np.full(nodes.size, self._length_m),
            mean=mean,
            covariance=covariance,
            target_mean=(mean @ coefficients.T + gust).reshape(-1, means, 2),
            target_variance=(np.maximum(unexplained, 0.0) + from_d).reshape(-1, means, 2),
        )

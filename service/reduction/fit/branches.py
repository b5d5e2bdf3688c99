"""Fits at several zero offsets, where one fit that is linear in the zero would not do.

A raw sensor's zero may be half of what it reads in flight. Scale, and the part of the reading's changes that is
airspeed, then depend on the zero so much that the fit is done at each of a few zeros, and the answers are joined with
the weights of a quadrature rule. The weights come from the prior and the first, linear fit; how well each zero fits is
no evidence by itself: where the airspeed changed by gusts alone, a wrong zero fits better (method notes, trap 2).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.domain.arrays import FloatArray
from service.reduction.fit.gust_posterior import GustPosterior
from service.reduction.fit.start import OffsetPrior, State

LARGEST_LINEAR_SHARE = 0.03
"""Standard uncertainty of the zero over the signal up to which one linear fit is good to 0.1 % of speed."""
LEAST_SIGNAL_SHARE = 0.1
"""No more than nine tenths of a reading can be offset, or there would be no airspeed."""
FIXED_ZERO_PA = 0.3
"""Uncertainty that a zero keeps in the fit done at it."""
NODES = 5
LEAST_SHARE = 1e-3


@dataclass(frozen=True, slots=True)
class Branch:
    """The posterior about one state, linear there."""

    weight: float
    state: State
    posterior: GustPosterior
    loiter_shares: FloatArray
    """(number of loiters,) of the time flown in them."""
    airspeed_mps: float
    consistency: float
    """Chance that loiters of one scale scatter as these do."""
    widening: float
    """Variance factor where they scatter too much."""


@dataclass(frozen=True, slots=True)
class Joined:
    """Mixture over all branches and their g nodes; values are absolute, not changes against a state."""

    weight: FloatArray
    """(g,)"""
    log_scale: FloatArray
    """(g,)"""
    zero_offset_pa: FloatArray
    """(g,)"""
    delay_s: FloatArray
    """(g,)"""
    wind_mps: FloatArray
    """(g, number of loiters, 2) of the model, without the mean gust."""
    covariance: FloatArray
    """(g, p, p)"""
    mean_wind_mps: FloatArray
    """(g, 1 + number of loiters, 2) over path and time: of all used loiters, of each."""
    mean_wind_variance: FloatArray
    intensity_mps: FloatArray
    """(g,)"""
    widening: FloatArray
    """(g,)"""
    airspeed_mps: float
    consistency: float

    def moments(self, mean: FloatArray, variance: FloatArray) -> tuple[float, float]:
        """Mean and standard deviation over the mixture of a quantity with (g,) means and variances."""
        value = float(self.weight @ mean)
        return value, float(np.sqrt(self.weight @ (variance + (mean - value) ** 2)))

    def common_variance(self, first: FloatArray, second: FloatArray, covariance: FloatArray) -> float:
        """Covariance over the mixture of two quantities with (g,) means and covariances."""
        off = (first - self.weight @ first) * (second - self.weight @ second)
        return float(self.weight @ (covariance + off))


def joined(branches: Sequence[Branch]) -> Joined:
    """The mixture of the branches; weights need not sum to 1."""
    total = sum(branch.weight for branch in branches)
    parts = [(branch, branch.state, branch.posterior) for branch in branches]
    return Joined(
        weight=np.concatenate([branch.weight / total * posterior.weight for branch, _, posterior in parts]),
        log_scale=np.concatenate([state.log_scale + posterior.mean[:, 0] for _, state, posterior in parts]),
        zero_offset_pa=np.concatenate([state.zero_offset_pa + posterior.mean[:, 1] for _, state, posterior in parts]),
        delay_s=np.concatenate([state.delay_s + posterior.mean[:, 2] for _, state, posterior in parts]),
        wind_mps=np.concatenate([state.wind_mps + posterior.winds for _, state, posterior in parts]),
        covariance=np.concatenate([posterior.covariance for _, _, posterior in parts]),
        mean_wind_mps=np.concatenate([_mean_winds(branch) for branch in branches]),
        mean_wind_variance=np.concatenate([posterior.target_variance for _, _, posterior in parts]),
        intensity_mps=np.concatenate([posterior.intensity_mps for _, _, posterior in parts]),
        widening=np.concatenate([np.full(posterior.weight.size, branch.widening) for branch, _, posterior in parts]),
        airspeed_mps=float(sum(branch.weight * branch.airspeed_mps for branch in branches) / total),
        consistency=max(branch.consistency for branch in branches),
    )


def _mean_winds(branch: Branch) -> FloatArray:
    level = branch.state.wind_mps
    return np.asarray(branch.posterior.target_mean + np.vstack([branch.loiter_shares @ level, level]))


def zeros_to_try(offset: OffsetPrior, first: Branch, signal_pa: float) -> list[tuple[float, float]]:
    """Zeros and weights of a rule for what prior and the first fit leave of the zero; none where one fit will do.

    Parameters
    ----------
    signal_pa : median reading in the loiters, offset included. [Pa]
    """
    posterior = first.posterior
    value = first.state.zero_offset_pa + float(posterior.weight @ posterior.mean[:, 1])
    variance = float(posterior.weight @ posterior.covariance[:, 1, 1])
    if np.sqrt(variance) < LARGEST_LINEAR_SHARE * max(abs(signal_pa - value), 1.0):
        return []
    highest = (1 - LEAST_SIGNAL_SHARE) * signal_pa
    if offset.rectangular:
        # what the data alone say, freed of the prior, within its bounds
        told = max(1.0 / variance - offset.standard_uncertainty_pa**-2, 1e-12)
        data_value = (value / variance - offset.value_pa * offset.standard_uncertainty_pa**-2) / told
        abscissas, weights = np.polynomial.legendre.leggauss(NODES)
        low, high = offset.value_pa + offset.reach_pa * np.array([-1.0, 1.0])
        zeros = 0.5 * (low + min(high, highest)) + 0.5 * (min(high, highest) - low) * abscissas
        weights = weights * np.exp(-0.5 * told * (zeros - data_value) ** 2)
    else:
        abscissas, weights = np.polynomial.hermite_e.hermegauss(NODES)
        zeros = value + np.sqrt(variance) * abscissas
        weights = np.where(zeros < highest, weights, 0.0)
    if weights.sum() <= 0:
        return []
    shares = weights / weights.sum()
    return [(zero, share) for zero, share in zip(zeros.tolist(), shares.tolist(), strict=True) if share > LEAST_SHARE]

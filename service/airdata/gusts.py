"""Covariance of gusts in isotropic, solenoidal turbulence, frozen in the air mass or decaying in time.

The covariance of two gust vectors a separation **r** apart is ``sigma^2 [(f - g) r^ r^T + g I]`` with the longitudinal
correlation f and the lateral one ``g = f + (r/2) f'`` (von Karman and Howarth 1938; Batchelor, The Theory of
Homogeneous Turbulence, 1953, section 3.4). For von Karman's spectrum ``f = 2^(2/3)/Gamma(1/3) z^(1/3) K_1/3(z)``,
``z = r/(1.339 L)``, L the integral length.
"""

import numpy as np
from scipy import special

from service.domain.arrays import FloatArray

VON_KARMAN_LENGTH = 1.339
"""Ratio of integral length to von Karman's length: Gamma(1/3) / (sqrt(pi) Gamma(5/6))."""

SEPARATION_OF_AVERAGES = 0.36
"""Smallest effective separation of two gusts that are each averaged over a length, as a share of it. With it the
difference of two adjoining averages has the variance that r^(2/3), by which f falls, gives it."""

_TABLE_X = np.concatenate([[0.0], np.geomspace(1e-4, 30.0, 3000)])


def von_karman_correlation(separation: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Longitudinal correlation f and its derivative f' by z, at z = r / (1.339 L) of any shape. [1]"""
    z = np.maximum(separation, 1e-12)
    scale = 2.0 ** (2.0 / 3.0) / special.gamma(1.0 / 3.0)
    f = scale * np.cbrt(z) * special.kv(1.0 / 3.0, z)
    # d/dz [z^v K_v(z)] = -z^v K_(v-1)(z), and K_(-2/3) = K_(2/3)
    derivative = -scale * np.cbrt(z) * special.kv(2.0 / 3.0, z)
    return f, derivative


_TABLE_F, _TABLE_DERIVATIVE = von_karman_correlation(_TABLE_X)
_TABLE_F[0] = 1.0
# f' grows as z^(-1/3) at zero, where only z f' is used: tabulate that, it is smooth enough to interpolate.
_TABLE_ZF = _TABLE_X * _TABLE_DERIVATIVE
_TABLE_ZF[0] = 0.0


class GustGeometry:
    """Points of a path with a direction at each: separations and projections, worked out once for many lengths.

    Parameters
    ----------
    positions_m : (n, 3) float
        Positions in the air mass. [m]
    directions : (n, 3) float
        Unit vectors on which the gust is projected.
    averaging_m : float
        Length over which each point's gust is averaged along the path. [m] It enters as a smallest effective
        separation, which keeps the covariance positive: the kernel is a mixture of Gaussian kernels in r^2, and a
        constant added to r^2 only re-weights the mixture.
    swept_m : (n,) float, optional
        How far the field may have been carried along unseen by the time of each point (drift's standard uncertainty
        times time). [m] Its differences are added to the separations in quadrature: the random sweeping of Kraichnan
        (1964), by which a field meets itself less alike the later. Positive for the same reason.
    """

    def __init__(
        self,
        positions_m: FloatArray,
        directions: FloatArray,
        averaging_m: float,
        swept_m: FloatArray | None = None,
    ) -> None:
        self._directions = directions
        apart = positions_m.T[:, :, None] - positions_m.T[:, None, :]
        square = np.einsum("kij,kij->ij", apart, apart)
        least = np.square(SEPARATION_OF_AVERAGES * averaging_m)
        if swept_m is not None:
            least = least + np.square(np.subtract.outer(swept_m, swept_m))
        self._distance = np.sqrt(square + least)
        self._share = square / np.maximum(self._distance**2, 1e-12)
        self._toward = apart / np.sqrt(np.maximum(square, 1e-12))
        self._along = np.einsum("kij,ik->ij", self._toward, directions)
        self._longitudinal = -self._along * self._along.T
        self._cosine = directions @ directions.T
        self._known: dict[float, tuple[FloatArray, FloatArray]] = {}

    def covariance(self, length_m: float) -> FloatArray:
        """(n, n) covariance of the projected gusts for unit intensity and integral length `length_m`."""
        across, excess = self._kernel(length_m)
        return np.asarray(across * self._cosine - excess * self._longitudinal)

    def mean_gusts(self, length_m: float, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Weighted means of the north and the east gust over the path, for unit intensity.

        Parameters
        ----------
        weights : (n, m) float
            Of m means.

        Returns
        -------
        cross : (n, m, 2) covariance of the projected gusts with the means, north and east.
        own : (m, 2) variance of the means.
        """
        across, excess = self._kernel(length_m)
        level = across @ weights
        cross, own = np.empty((*weights.shape, 2)), np.empty((weights.shape[1], 2))
        for axis in (0, 1):
            toward = self._toward[axis]
            cross[:, :, axis] = self._directions[:, axis, None] * level - (excess * self._along * toward) @ weights
            own[:, axis] = np.einsum("nm,nm->m", weights, level - (excess * toward**2) @ weights)
        return cross, own

    def _kernel(self, length_m: float) -> tuple[FloatArray, FloatArray]:
        """g and g - f by separation, (n, n) each; kept for the next call with the same length."""
        if length_m not in self._known:
            z = self._distance / (VON_KARMAN_LENGTH * length_m)
            f = np.interp(z, _TABLE_X, _TABLE_F, right=0.0)
            # g - f = (r/2) f'
            excess = 0.5 * self._share * np.interp(z, _TABLE_X, _TABLE_ZF, right=0.0)
            self._known[length_m] = (f + excess, excess)
        return self._known[length_m]

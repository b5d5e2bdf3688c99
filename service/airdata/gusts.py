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

SEPARATION_OF_AVERAGES = 0.5
"""Smallest effective separation of gusts averaged over a length, as a share of it. The variance alone asks for 0.33;
with 0.5 the intensity comes out right in simulated circles, whose blocks are averaged on a bend."""

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
    """Separations and projections of points along a path, worked out once for many length scales.

    Parameters
    ----------
    positions_m : (n, d) float
        Positions in the air mass, d = 2 or 3. [m]
    directions : (n, d) float
        Unit vectors on which the gust is projected.
    averaging_m : float
        Length over which each point's gust is averaged along the path. [m] It enters as a smallest effective
        separation, which keeps the covariance positive: the kernel is a mixture of Gaussian kernels in r^2, and a
        constant added to r^2 only re-weights the mixture.
    """

    def __init__(
        self,
        positions_m: FloatArray,
        directions: FloatArray,
        averaging_m: float,
        other_positions_m: FloatArray | None = None,
        other_directions: FloatArray | None = None,
    ) -> None:
        second = positions_m if other_positions_m is None else other_positions_m
        facing = directions if other_directions is None else other_directions
        dimensions = positions_m.shape[1]
        difference = [positions_m[:, None, k] - second[None, :, k] for k in range(dimensions)]
        square = sum((d * d for d in difference), np.zeros((len(positions_m), len(second))))
        self._distance = np.sqrt(square + (SEPARATION_OF_AVERAGES * averaging_m) ** 2)
        inverse_square = 1.0 / np.maximum(square, 1e-12)
        along_first = sum((d * directions[:, None, k] for k, d in enumerate(difference)), np.zeros_like(square))
        along_second = sum((d * facing[None, :, k] for k, d in enumerate(difference)), np.zeros_like(square))
        self._longitudinal = along_first * along_second * inverse_square
        self._cosine = directions @ facing.T
        self._share = square / np.maximum(self._distance**2, 1e-12)
        self._known: dict[float, FloatArray] = {}

    def covariance(self, length_m: float) -> FloatArray:
        """(n, n) covariance of the projected gusts for unit intensity and integral length `length_m`.

        Kept for the next call with the same length: treat it as read-only.
        """
        if length_m not in self._known:
            self._known[length_m] = self._covariance(length_m)
        return self._known[length_m]

    def _covariance(self, length_m: float) -> FloatArray:
        z = self._distance / (VON_KARMAN_LENGTH * length_m)
        f = np.interp(z, _TABLE_X, _TABLE_F, right=0.0)
        half_zf = 0.5 * self._share * np.interp(z, _TABLE_X, _TABLE_ZF, right=0.0)
        # f - g = -(r/2) f'
        return np.asarray((f + half_zf) * self._cosine - half_zf * self._longitudinal)

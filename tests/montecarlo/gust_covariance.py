"""Covariance of the gusts that a simulated flight met, as its field was drawn: not as an estimator models it.

Isotropic solenoidal turbulence has the covariance sigma^2 [(f - g) r r' + g I] of two gust vectors, r the unit vector
between them (von Karman and Howarth 1938; Batchelor 1953, section 3.4), f and g the simulator's own correlations. An
anisotropic field is one isotropic field for the horizontal components and another for the vertical one; a decaying one
loses exp(-|dt| / turnover).
"""

import numpy as np

from service.domain.arrays import FloatArray
from tests.synthetic.gust_field import GustModel, Spectrum, lateral_correlation, longitudinal_correlation

TABLE_SIZE = 3000
"""Separations at which the correlations are computed: f falls like r^(2/3) at first, so they are spaced as squares, and
then a straight line between them is good to 1e-5."""


def covariance_along(model: GustModel, position_m: FloatArray, time_s: FloatArray, direction: FloatArray) -> FloatArray:
    """Covariance of the gust's component along a direction at each of n points.

    Parameters
    ----------
    position_m : (n, 3)
        In the air mass: north, east, down. [m]
    time_s : (n,)
    direction : (n, 3)
        Unit vectors.

    Returns
    -------
    (n, n) [m2/s2].
    """
    between = position_m[:, None, :] - position_m[None, :, :]
    separation = np.sqrt(np.sum(between**2, axis=2))
    unit = between / np.maximum(separation, 1e-9)[:, :, None]
    level = direction * [1.0, 1.0, 0.0]
    if model.vertical_sigma_mps is None or model.vertical_length_m is None:
        covariance = _isotropic(model.spectrum, model.sigma_mps, model.length_m, separation, unit, direction)
    else:
        covariance = _isotropic(model.spectrum, model.sigma_mps, model.length_m, separation, unit, level)
        covariance += _isotropic(
            model.spectrum, model.vertical_sigma_mps, model.vertical_length_m, separation, unit, direction - level
        )
    return np.asarray(covariance * np.exp(-np.abs(time_s[:, None] - time_s) / model.turnover_s))


def _isotropic(
    spectrum: Spectrum,
    sigma_mps: float,
    length_m: float,
    separation_m: FloatArray,
    unit: FloatArray,
    direction: FloatArray,
) -> FloatArray:
    """(n, n) covariance of one isotropic field's components along `direction`."""
    along, across = _correlations(spectrum, length_m, separation_m)
    first = np.einsum("ijk,ik->ij", unit, direction)
    second = np.einsum("ijk,jk->ij", unit, direction)
    return np.asarray(sigma_mps**2 * ((along - across) * first * second + across * (direction @ direction.T)))


def _correlations(spectrum: Spectrum, length_m: float, separation_m: FloatArray) -> tuple[FloatArray, FloatArray]:
    """f and g at every separation, from a table: the Bessel functions are slow."""
    farthest = max(float(separation_m.max()), 1e-6)
    root = np.linspace(0.0, 1.0, TABLE_SIZE)
    table_m = farthest * root**2
    wanted = np.sqrt(separation_m / farthest)
    along = np.interp(wanted, root, longitudinal_correlation(spectrum, table_m, length_m))
    return along, np.interp(wanted, root, lateral_correlation(spectrum, table_m, length_m))

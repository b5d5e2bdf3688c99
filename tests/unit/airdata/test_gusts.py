"""Covariance of gusts: von Karman's correlation, isotropy, positivity."""

import numpy as np
import pytest
from scipy import integrate

from service.airdata.gusts import VON_KARMAN_LENGTH, GustGeometry, von_karman_correlation
from service.domain.arrays import FloatArray

RNG = np.random.default_rng(1)


def test_the_length_is_the_integral_length() -> None:
    length_m = 200.0
    r = np.concatenate([[0.0], np.geomspace(1e-3, 2e4, 4000)])
    f, _ = von_karman_correlation(r / (VON_KARMAN_LENGTH * length_m))
    assert integrate.trapezoid(f, r) == pytest.approx(length_m, rel=1e-3)


def test_the_correlation_falls_from_one_to_nothing() -> None:
    f, slope = von_karman_correlation(np.array([1e-9, 0.01, 0.1, 1.0, 5.0, 25.0]))
    assert f[0] == pytest.approx(1.0, abs=1e-5)
    assert np.all(np.diff(f) < 0.0)
    assert np.all(slope < 0.0)
    assert f[-1] < 1e-9


def test_the_derivative_is_that_of_the_correlation() -> None:
    z, step = np.array([0.05, 0.3, 1.0, 3.0]), 1e-5
    rise = (von_karman_correlation(z + step)[0] - von_karman_correlation(z - step)[0]) / (2.0 * step)
    assert von_karman_correlation(z)[1] == pytest.approx(rise, rel=1e-6)


def longitudinal(separation_m: FloatArray, length_m: float) -> FloatArray:
    return von_karman_correlation(separation_m / (VON_KARMAN_LENGTH * length_m))[0]


def _pair(distance_m: float, direction: tuple[float, float, float]) -> float:
    positions = np.array([[0.0, 0.0, 0.0], [distance_m, 0.0, 0.0]])
    return float(GustGeometry(positions, np.tile(direction, (2, 1)), 0.0).covariance(200.0)[0, 1])


def test_along_and_across_the_separation() -> None:
    for distance_m in (20.0, 150.0, 600.0):
        z = np.array([distance_m / (VON_KARMAN_LENGTH * 200.0)])
        f, slope = von_karman_correlation(z)
        assert _pair(distance_m, (1.0, 0.0, 0.0)) == pytest.approx(f[0], abs=1e-5)
        across = f[0] + 0.5 * z[0] * slope[0]
        assert _pair(distance_m, (0.0, 1.0, 0.0)) == pytest.approx(across, abs=1e-5)
        assert _pair(distance_m, (0.0, 0.0, 1.0)) == pytest.approx(across, abs=1e-5)


def test_across_the_flow_the_gusts_turn_back() -> None:
    # solenoidal: what flows one way here comes back beside it
    assert _pair(800.0, (0.0, 1.0, 0.0)) < 0.0 < _pair(800.0, (1.0, 0.0, 0.0))


def test_unit_variance_on_the_diagonal_and_less_for_averages() -> None:
    positions, directions = RNG.normal(0.0, 100.0, (5, 3)), np.tile([0.6, 0.8, 0.0], (5, 1))
    assert np.diag(GustGeometry(positions, directions, 0.0).covariance(200.0)) == pytest.approx(1.0, abs=1e-9)
    averaged = np.diag(GustGeometry(positions, directions, 50.0).covariance(200.0))
    assert np.all((averaged < 0.95) & (averaged > 0.7))


@pytest.mark.parametrize("length_m", [40.0, 200.0, 850.0])
@pytest.mark.parametrize("averaging_m", [0.0, 15.0])
def test_the_covariance_is_symmetric_and_positive(length_m: float, averaging_m: float) -> None:
    positions = RNG.uniform(-200.0, 200.0, (80, 3))
    directions = RNG.normal(0.0, 1.0, (80, 3))
    directions /= np.linalg.norm(directions, axis=1)[:, None]
    covariance = GustGeometry(positions, directions, averaging_m).covariance(length_m)
    assert covariance == pytest.approx(covariance.T, abs=1e-12)
    assert np.linalg.eigvalsh(covariance).min() > -1e-6


def test_a_turned_path_has_the_same_covariance() -> None:
    positions = RNG.uniform(-200.0, 200.0, (10, 3))
    directions = np.tile([1.0, 0.0, 0.0], (10, 1))
    turn, _ = np.linalg.qr(RNG.normal(0.0, 1.0, (3, 3)))
    plain = GustGeometry(positions, directions, 5.0).covariance(200.0)
    turned = GustGeometry(positions @ turn.T, directions @ turn.T, 5.0).covariance(200.0)
    assert turned == pytest.approx(plain, abs=1e-9)


def test_mean_gusts_are_sums_of_the_covariances() -> None:
    positions = RNG.uniform(-200.0, 200.0, (6, 3))
    directions = RNG.normal(0.0, 1.0, (6, 3))
    directions /= np.linalg.norm(directions, axis=1)[:, None]
    weights = RNG.random((6, 2))
    cross, own = GustGeometry(positions, directions, 10.0).mean_gusts(200.0, weights)
    for axis in (0, 1):
        facing = np.tile(np.eye(3)[axis], (6, 1))
        both = GustGeometry(np.vstack([positions] * 2), np.vstack([directions, facing]), 10.0).covariance(200.0)
        assert cross[:, :, axis] == pytest.approx(both[:6, 6:] @ weights, abs=1e-12)
        assert own[:, axis] == pytest.approx(np.einsum("im,ij,jm->m", weights, both[6:, 6:], weights), abs=1e-12)


def test_adjoining_averages_differ_as_much_as_their_integrals() -> None:
    # second derivation: the covariance of two averages over adjoining stretches of one straight path, by quadrature
    length_m, stretch_m, fine = 200.0, 25.0, 400
    inside = (np.arange(fine) + 0.5) / fine * stretch_m
    points = np.concatenate([inside, inside + stretch_m])
    f = longitudinal(np.abs(points[:, None] - points[None, :]), length_m)
    first, second = slice(0, fine), slice(fine, None)
    exact = 2.0 * (f[first, first].mean() - f[first, second].mean())
    positions = np.array([[0.0, 0.0, 0.0], [stretch_m, 0.0, 0.0]])
    covariance = GustGeometry(positions, np.tile([1.0, 0.0, 0.0], (2, 1)), stretch_m).covariance(length_m)
    assert 2.0 * (covariance[0, 0] - covariance[0, 1]) == pytest.approx(exact, rel=0.03)


def test_a_field_that_is_swept_is_another_one_later() -> None:
    # Gaussian kernels in r^2 average to longer ones over normal drifts: less is left of the covariance, never more
    positions, directions = np.zeros((3, 3)), np.tile([1.0, 0.0, 0.0], (3, 1))
    left = GustGeometry(positions, directions, 0.0, np.array([0.0, 50.0, 200.0])).covariance(200.0)[0]
    assert left[0] == pytest.approx(1.0, abs=1e-9)
    assert 1.0 > left[1] > left[2] > 0.0

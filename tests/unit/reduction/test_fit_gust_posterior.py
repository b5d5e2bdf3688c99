"""The posterior over gust fields, checked by drawing data from the model itself."""

import numpy as np
import pytest

from service.airdata.gusts import GustGeometry
from service.domain.arrays import FloatArray
from service.reduction.fit.gust_posterior import Columns, LinearModel, Targets, gust_posterior, typical_mean
from service.reduction.fit.mixtures import mixture_estimate

SPEED_MPS, STEP_S, COUNT = 17.0, 2.0, 90
TURN_RAD_S = 0.21
NOISE_MPS = 0.04


def circling() -> tuple[FloatArray, FloatArray, FloatArray]:
    """Time, positions (k, 3) in the air mass and air direction (k, 3): three minutes of circles in 5 m/s of wind."""
    time_s = STEP_S * np.arange(COUNT)
    angle = TURN_RAD_S * time_s
    direction = np.column_stack([np.cos(angle), np.sin(angle), np.zeros(COUNT)])
    position = SPEED_MPS / TURN_RAD_S * np.column_stack([np.sin(angle), -np.cos(angle), np.zeros(COUNT)])
    position[:, 0] += 5.0 * time_s
    return time_s, position, direction


def model_of(observed: FloatArray, direction: FloatArray, time_s: FloatArray) -> LinearModel:
    columns = Columns(1)
    design = np.zeros((COUNT, columns.count))
    design[:, 0] = -0.5 * SPEED_MPS
    design[:, columns.winds] = -direction[:, :2]
    precision = np.diag([0.0, 1.0, 100.0, 4e-4, 4e-4, 70.0, 70.0])
    return LinearModel(observed, design, np.zeros(columns.count), precision, np.ones(COUNT), time_s)


def test_columns_are_told_from_their_count() -> None:
    for loiters in (1, 2, 7):
        assert Columns.of(Columns(loiters).count) == Columns(loiters)


def test_intervals_hold_what_the_model_draws() -> None:
    """200 draws at the middle of the priors: 95 % within 3 binomial deviations, and not all of them."""
    rng = np.random.default_rng(8)
    time_s, position, direction = circling()
    gust = GustGeometry(position, direction, SPEED_MPS * STEP_S)
    targets = Targets(np.zeros((1, 2, 7)), np.full((COUNT, 1), 1.0 / COUNT))
    targets.coefficients[0, 0, 3] = targets.coefficients[0, 1, 4] = 1.0
    cross, own = gust.mean_gusts(200.0, targets.weights)
    joint = np.zeros((COUNT + 2, COUNT + 2))
    joint[:COUNT, :COUNT] = gust.covariance(200.0)
    joint[:COUNT, COUNT:] = -cross[:, 0]
    joint[COUNT:, :COUNT] = joint[:COUNT, COUNT:].T
    joint[COUNT:, COUNT:] = np.diag(own[0])
    values, vectors = np.linalg.eigh(joint)
    root = 0.4 * vectors * np.sqrt(np.maximum(values, 0.0))
    scale_held, wind_held = [], []
    for _ in range(200):
        drawn = root @ rng.standard_normal(COUNT + 2)
        model = model_of(drawn[:COUNT] + rng.normal(0.0, NOISE_MPS, COUNT), direction, time_s)
        posterior = gust_posterior(model, gust, targets, 0.3)
        scale = mixture_estimate(posterior.weight, posterior.mean[:, 0], np.sqrt(posterior.covariance[:, 0, 0]))
        scale_held.append(scale.interval_95[0] <= 0.0 <= scale.interval_95[1])
        for axis in (0, 1):
            mean, variance = posterior.target_mean[:, 0, axis], posterior.target_variance[:, 0, axis]
            wind = mixture_estimate(posterior.weight, mean, np.sqrt(variance))
            wind_held.append(wind.interval_95[0] <= drawn[COUNT + axis] <= wind.interval_95[1])
    assert 0.90 <= np.mean(scale_held) < 1.0
    assert 0.90 <= np.mean(wind_held) < 1.0


def test_what_the_design_explains_is_found() -> None:
    time_s, position, direction = circling()
    gust = GustGeometry(position, direction, SPEED_MPS * STEP_S)
    truth = np.array([0.03, 0.0, 0.0, 1.2, -0.7, 0.0, 0.0])
    model = model_of(np.zeros(COUNT), direction, time_s)
    noise = np.random.default_rng(2).normal(0.0, 1e-3, COUNT)
    model = model_of(model.design @ truth + noise, direction, time_s)
    assert typical_mean(model, gust, 1e-3)[[0, 3, 4]] == pytest.approx(truth[[0, 3, 4]], abs=2e-3)

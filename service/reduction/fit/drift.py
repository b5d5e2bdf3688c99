"""Drift of the gust field over a spot, where the wind is light.

The field drifts with the wind of a wide neighbourhood; circles over one spot see that wind plus the mean gust there.
In a fresh wind the difference does not matter; in a light one it decides whether the next circle meets the same gusts
again, and the repetition itself tells: the drift that makes the residuals likeliest is taken.
"""

import numpy as np
from scipy import optimize

from service.airdata.gusts import GustGeometry
from service.domain.arrays import FloatArray
from service.domain.results import AirDataSeries
from service.reduction.fit.blocks import Blocks
from service.reduction.fit.gust_posterior import LinearModel, field_evidence, likeliest_field
from service.reduction.fit.linear_model import air_path, directions
from service.reduction.fit.start import Residuals, State

LIGHT_WIND_MPS = 3.0
"""Above it a field of some hundred metres is blown through between one circle and the next but one."""
DRIFT_DOUBT = 1.1
"""Standard deviation of the drift about the local mean wind, in units of the residual's root mean square."""
FIRST_STEP_MPS = 0.25
TRIALS = 40


def field_drift(
    series: AirDataSeries, blocks: Blocks, state: State, now: Residuals, model: LinearModel, residual_rms_mps: float
) -> FloatArray:
    """(number of loiters, 2) velocity with which the gust field moves over the ground, by loiter. [m/s]"""
    if float(np.hypot(*state.wind_mps.mean(axis=0))) > LIGHT_WIND_MPS:
        return state.wind_mps
    direction = directions(blocks.mean(directions(now.air_velocity_mps)))
    averaging_m = blocks.seconds * float(np.median(now.probe.speed_mps))
    doubt = DRIFT_DOUBT * residual_rms_mps

    def geometry(shift: FloatArray) -> GustGeometry:
        return GustGeometry(air_path(series, blocks, state.wind_mps + shift), direction, averaging_m)

    intensity, noise = likeliest_field(model, geometry(np.zeros(2)), residual_rms_mps)

    def unlikeliness(shift: FloatArray) -> float:
        prior = 0.5 * float(shift @ shift) / doubt**2
        return prior - field_evidence(model, geometry(shift), intensity, noise)

    simplex = FIRST_STEP_MPS * np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]])
    found = optimize.minimize(
        unlikeliness,
        np.zeros(2),
        method="Nelder-Mead",
        options={"initial_simplex": simplex, "maxfev": TRIALS, "xatol": 0.01, "fatol": 0.05},
    )
    return np.asarray(state.wind_mps + found.x)

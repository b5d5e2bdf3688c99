"""The fit, linear about a state: residuals of the blocks, smoothed slopes, priors, and the path in the air mass."""

from collections.abc import Sequence

import numpy as np

from service.airdata.gusts import GustGeometry
from service.domain.arrays import FloatArray
from service.domain.results import AirDataSeries, Loiter
from service.reduction.fit.blocks import Blocks
from service.reduction.fit.gust_posterior import Columns, LinearModel, Targets
from service.reduction.fit.probe_speed import ProbeSpeed
from service.reduction.fit.start import DelayPrior, OffsetPrior, Residuals, State

WIND_CHANGE_SHARE, LEAST_WIND_CHANGE_MPS = 0.25, 0.3
WIND_CHANGE_TIME_S = 1800.0
WIND_CHANGE_HEIGHT_M = 400.0
"""Winds of two loiters differ by about 0.75 m/s after four minutes and 1.2 m/s over 150 m of height (one sigma)."""
WIND_DRIFT_MPS_PER_MIN = 0.12
UNKNOWN_WIND_MPS = 50.0


def linear_model(
    blocks: Blocks, probe: ProbeSpeed, state: State, now: Residuals, offset: OffsetPrior, delay: DelayPrior
) -> LinearModel:
    """Linear model of the block residuals about `state`."""
    columns = Columns(state.wind_mps.shape[0])
    observed = blocks.mean(now.residual_mps)
    acceleration = probe.acceleration_at(blocks.time_s, state.log_scale, state.zero_offset_pa, state.delay_s)
    slopes = np.zeros((observed.size, columns.count))
    trust = _trust_in_changes(blocks, blocks.mean(now.probe.speed_mps), observed)
    for column, slope in ((0, now.probe.per_log_scale), (1, now.probe.per_zero_offset)):
        steady = _over_one_turn(blocks, blocks.mean(slope))
        slopes[:, column] = steady.mean() + trust * (steady - steady.mean())
    slopes[:, 2] = _over_one_turn(blocks, blocks.mean(-acceleration))
    direction, minutes = directions(now.air_velocity_mps), _minutes_in_loiter(blocks)
    rows = np.arange(observed.size)
    for axis in (0, 1):
        along = blocks.mean(direction[:, axis])
        slopes[rows, columns.winds.start + 2 * blocks.loiter + axis] = along
        slopes[rows, columns.drifts.start + 2 * blocks.loiter + axis] = along * minutes
    mean = np.zeros(columns.count)
    mean[1] = offset.value_pa - state.zero_offset_pa
    mean[2] = delay.value_s - state.delay_s
    mean[columns.winds] = (state.wind_mps.mean(axis=0) - state.wind_mps).ravel()
    precision = np.zeros((columns.count, columns.count))
    precision[1, 1] = offset.standard_uncertainty_pa**-2
    precision[2, 2] = delay.standard_uncertainty_s**-2
    precision[columns.winds, columns.winds] = _wind_precision(blocks, state.wind_mps)
    precision[columns.drifts, columns.drifts] = np.eye(2 * columns.loiters) / WIND_DRIFT_MPS_PER_MIN**2
    # the residual at the true parameters is the gust: observed = -slopes d + eta
    noise = float(np.median(blocks.counts)) / blocks.counts
    return LinearModel(observed, -slopes, mean, precision, noise, blocks.mean(blocks.time_s))


def directions(velocity_mps: FloatArray) -> FloatArray:
    """(n, 3) unit vectors of velocities (n, 3)."""
    return np.asarray(velocity_mps / np.maximum(np.linalg.norm(velocity_mps, axis=1), 1e-6)[:, None])


def loiter_means(blocks: Blocks, values: FloatArray, loiters: int) -> FloatArray:
    """Mean of block values (k,) by loiter; of all where a loiter has no block, or where its values are unknown."""
    known = np.isfinite(values)
    count = np.bincount(blocks.loiter[known], minlength=loiters)
    total = np.bincount(blocks.loiter[known], weights=values[known], minlength=loiters)
    overall = float(values[known].mean()) if known.any() else float("nan")
    return np.where(count > 0, total / np.maximum(count, 1), overall)


def time_shares(blocks: Blocks, loiters: Sequence[Loiter]) -> FloatArray:
    """(number of loiters,) share of each in the time flown in all that were used; sums to 1."""
    lasting = [
        loiter.end_s - loiter.start_s if loiter.used and (blocks.loiter == index).any() else 0.0
        for index, loiter in enumerate(loiters)
    ]
    return np.array(lasting) / sum(lasting)


def wind_targets(blocks: Blocks, loiters: Sequence[Loiter]) -> Targets:
    """Wind over path and time: of all used loiters by their time, then of each loiter."""
    columns = Columns(len(loiters))
    share_of_each = np.vstack([time_shares(blocks, loiters), np.eye(len(loiters))])
    of_loiter = np.zeros((blocks.loiter.size, len(loiters)))
    of_loiter[np.arange(blocks.loiter.size), blocks.loiter] = blocks.counts
    of_loiter /= np.maximum(of_loiter.sum(axis=0), 1.0)
    coefficients = np.zeros((len(share_of_each), 2, columns.count))
    for axis in (0, 1):
        coefficients[:, axis, columns.wind(axis)] = share_of_each
    return Targets(coefficients, of_loiter @ share_of_each.T)


def gust_geometry(
    series: AirDataSeries, blocks: Blocks, now: Residuals, drift_mps: FloatArray, sweeping_mps: float
) -> GustGeometry:
    """The blocks' path in a gust field that drifts with (number of loiters, 2) `drift_mps`.

    `sweeping_mps` is the standard uncertainty of that drift.
    """
    time_s = series.gps_time_s
    at = blocks.mean(blocks.time_s)
    middle = loiter_means(blocks, at, drift_mps.shape[0])
    order = np.argsort(middle)
    path = np.zeros((time_s.size, 3))
    for axis, velocity in enumerate((series.velocity_north_mps, series.velocity_east_mps, series.velocity_down_mps)):
        drift = np.interp(time_s, middle[order], drift_mps[order, axis]) if axis < 2 else 0.0
        air = velocity - drift
        path[1:, axis] = np.cumsum(0.5 * (air[1:] + air[:-1]) * np.diff(time_s))
    if np.isfinite(series.gps_altitude_m).all():
        path[:, 2] = -series.gps_altitude_m
    return GustGeometry(
        np.column_stack([np.interp(at, time_s, path[:, axis]) for axis in range(3)]),
        directions(blocks.mean(directions(now.air_velocity_mps))),
        blocks.seconds * float(np.median(now.probe.speed_mps)),
        sweeping_mps * at,
    )


def _over_one_turn(blocks: Blocks, values: FloatArray) -> FloatArray:
    """Running mean of block values over one turn, within each loiter: gusts push the quick changes (trap 2)."""
    smooth = values.copy()
    for index in np.unique(blocks.loiter).tolist():
        inside = np.flatnonzero(blocks.loiter == index)
        half = int(blocks.memory[index]) // 2
        total = np.concatenate([[0.0], np.cumsum(values[inside])])
        low = np.maximum(np.arange(inside.size) - half, 0)
        high = np.minimum(np.arange(inside.size) + half + 1, inside.size)
        smooth[inside] = (total[high] - total[low]) / (high - low)
    return smooth


def _trust_in_changes(blocks: Blocks, speed_mps: FloatArray, observed: FloatArray) -> float:
    """Share of the slow changes of airspeed that was commanded, 0 to 1: what gusts alone would show is no evidence.

    Such changes tell scale from zero offset. Those of the size of the residuals are the gusts' own, and correlated with
    the residuals: leaning on them finds zero offsets that are not there (trap 2).
    """
    slow = _over_one_turn(blocks, speed_mps)
    return max(1.0 - float(np.mean(observed**2)) / max(float(np.var(slow)), 1e-12), 0.0)


def _minutes_in_loiter(blocks: Blocks) -> FloatArray:
    """(k,) time from the middle of each block's loiter. [min]"""
    time_s = blocks.mean(blocks.time_s)
    middle = loiter_means(blocks, time_s, blocks.memory.size)
    return np.asarray((time_s - middle[blocks.loiter]) / 60.0)


def _wind_precision(blocks: Blocks, wind_mps: FloatArray) -> FloatArray:
    """Winds of loiters near in time and height are alike, the more so where it is light; their common level is free."""
    loiters = len(wind_mps)
    time_s = loiter_means(blocks, blocks.mean(blocks.time_s), loiters)
    height = np.nan_to_num(loiter_means(blocks, blocks.mean(blocks.altitude_m), loiters))
    later, higher = (np.abs(values[:, None] - values) for values in (time_s, height))
    alike = np.exp(-later / WIND_CHANGE_TIME_S - higher / WIND_CHANGE_HEIGHT_M)
    change = np.hypot(LEAST_WIND_CHANGE_MPS, WIND_CHANGE_SHARE * float(np.hypot(*wind_mps.mean(axis=0))))
    covariance = change**2 * alike + 1e-6 * np.eye(loiters) + UNKNOWN_WIND_MPS**2
    return np.asarray(np.kron(np.linalg.inv(covariance), np.eye(2)), dtype=np.float64)

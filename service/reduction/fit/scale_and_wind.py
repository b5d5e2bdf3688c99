"""The fit: pressure scale, zero offset, GPS delay and wind, with the uncertainty that correlated gusts leave.

Residual of a block: probe's true airspeed minus |ground velocity - wind|, which is minus the gust along the air velocity
(plus noise). Three measures against known biases (method notes, traps 1 to 4): the noisy GPS side is never the regressor;
slopes by scale, zero and delay are smoothed over one turn, so that quick changes of speed, which the gusts push, carry no
weight; the second-order effect of cross gusts is in the budget.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.airdata.gusts import GustGeometry
from service.airdata.pitot import calibrated_airspeed_from_impact_pressure
from service.domain.arrays import BoolArray, FloatArray, IntArray
from service.domain.codes import Reason, ZeroOffsetSource
from service.domain.results import (
    AirDataSeries,
    Estimate,
    FitResult,
    FittedPoints,
    Loiter,
    LoiterWind,
    ReasonGiven,
    WindEstimate,
)
from service.reduction.fit.blocks import Blocks, gather_blocks
from service.reduction.fit.gust_posterior import GustPosterior, LinearModel, Target, gust_posterior, mixture_quantile
from service.reduction.fit.probe_speed import ProbeSpeed
from service.reduction.fit.start import (
    DelayPrior,
    OffsetPrior,
    Residuals,
    State,
    clear_delay,
    residuals,
    start_state,
    without_outliers,
)

FEWEST_BLOCKS = 8
FEWEST_SAMPLES = 12
WIND_CHANGE_MPS = 1.5
WIND_CHANGE_TIME_S = 1800.0
WIND_CHANGE_HEIGHT_M = 400.0
"""Winds of two loiters differ by about 0.75 m/s after four minutes and 1.2 m/s over 150 m of height (one sigma)."""
WIND_DRIFT_MPS_PER_MIN = 0.25
UNKNOWN_WIND_MPS = 50.0
CROSS_GUST_SHARE = 0.58
"""Standard deviation of 1 - 2c for a share c of the cross gusts followed that may be anything from 0 to 1 (trap 4)."""
RESIDUAL_FLOOR_MPS = 0.004
FIRST_LOITER_COLUMN = 3


@dataclass(frozen=True, slots=True)
class PreliminaryFit:
    """Blocks and robust start: enough to judge ground wind, delay and headings before the full fit."""

    probe: ProbeSpeed
    blocks: Blocks
    state: State

    def air_heading_rad(self) -> FloatArray:
        """(m,) direction of the air velocity at the blocks' samples."""
        air = residuals(self.probe, self.blocks, self.state).air_velocity_mps
        return np.asarray(np.arctan2(air[:, 1], air[:, 0]))

    def turn_numbers(self) -> IntArray:
        """(m,) number of the turn of each sample, all loiters counted on."""
        blocks = self.blocks
        place = np.arange(blocks.starts.size) - np.searchsorted(blocks.loiter, blocks.loiter)
        turn = place // blocks.memory[blocks.loiter] + blocks.loiter * (1 + int(place.max()))
        return np.repeat(turn, blocks.counts.astype(np.int64))


def preliminary_fit(
    series: AirDataSeries, usable: BoolArray, loiters: Sequence[Loiter], offset: OffsetPrior, delay: DelayPrior
) -> PreliminaryFit | ReasonGiven:
    """Robust least squares start, or the reason why the data hold no fit.

    Parameters
    ----------
    usable : (n,) probe samples that may enter the fit.
    """
    blocks = gather_blocks(series, loiters)
    if blocks is None:
        return _too_few("no GPS sample lies in a loiter")
    probe = ProbeSpeed(series, usable, blocks.time_s)
    covered = probe.covers(blocks.time_s, delay.value_s)
    if covered.sum() < FEWEST_SAMPLES:
        return _too_few("GPS and usable probe samples hardly overlap in the loiters")
    blocks = blocks.keep(covered)
    if blocks.starts.size < FEWEST_BLOCKS:
        return _too_few(f"only {blocks.starts.size} points along the loiters")
    state = start_state(probe, blocks, offset, delay)
    if state is None:
        return ReasonGiven(
            Reason.PROBE_FAULT,
            "The readings do not rise with airspeed at any scale: look for blocked or swapped tubes.",
        )
    blocks = without_outliers(probe, blocks, state)
    state = start_state(probe, blocks, offset, delay) or state
    return PreliminaryFit(probe, blocks, state)


def _too_few(what: str) -> ReasonGiven:
    return ReasonGiven(Reason.TOO_FEW_SAMPLES, f"Too few samples for a fit: {what}.")


def fit_scale_and_wind(
    series: AirDataSeries,
    loiters: Sequence[Loiter],
    preliminary: PreliminaryFit,
    offset: OffsetPrior,
    offset_source: ZeroOffsetSource,
    delay: DelayPrior,
) -> FitResult:
    """The full fit about a preliminary one. `loiters` as given to that one."""
    probe, blocks = preliminary.probe, preliminary.blocks
    delay = clear_delay(probe, blocks, preliminary.state, offset, delay)
    state = start_state(probe, blocks, offset, delay) or preliminary.state
    now = residuals(probe, blocks, state)
    model = _linear_model(series, blocks, state, now, offset, delay)
    posterior = _posterior(series, blocks, loiters, state, now, model)
    return _result(series, loiters, blocks, probe, state, posterior, offset, offset_source)


def _linear_model(
    series: AirDataSeries, blocks: Blocks, state: State, now: Residuals, offset: OffsetPrior, delay: DelayPrior
) -> LinearModel:
    """Parameters: ln K, zero offset, delay, then wind north and east of each loiter, then their drifts [m/s per min]."""
    observed = blocks.mean(now.residual_mps)
    loiters = state.wind_mps.shape[0]
    first_drift = FIRST_LOITER_COLUMN + 2 * loiters
    design = np.zeros((observed.size, first_drift + 2 * loiters))
    design[:, 0] = _smoothed(blocks, blocks.mean(now.probe.per_log_scale))
    design[:, 1] = _smoothed(blocks, blocks.mean(now.probe.per_zero_offset))
    design[:, 2] = _smoothed(blocks, blocks.mean(-now.probe.per_second))
    direction = _directions(now.air_velocity_mps)
    minutes = _minutes_in_loiter(blocks)
    rows = np.arange(observed.size)
    for axis in (0, 1):
        along = blocks.mean(direction[:, axis])
        design[rows, FIRST_LOITER_COLUMN + 2 * blocks.loiter + axis] = along
        design[rows, first_drift + 2 * blocks.loiter + axis] = along * minutes
    mean = np.zeros(design.shape[1])
    mean[1] = offset.value_pa - state.zero_offset_pa
    mean[2] = delay.value_s - state.delay_s
    precision = np.zeros((design.shape[1],) * 2)
    precision[1, 1] = offset.standard_uncertainty_pa**-2
    precision[2, 2] = delay.standard_uncertainty_s**-2
    precision[FIRST_LOITER_COLUMN:first_drift, FIRST_LOITER_COLUMN:first_drift] = _wind_precision(
        series, blocks, loiters
    )
    drifts = np.arange(first_drift, design.shape[1])
    precision[drifts, drifts] = WIND_DRIFT_MPS_PER_MIN**-2
    mean[FIRST_LOITER_COLUMN:first_drift] = (state.wind_mps.mean(axis=0) - state.wind_mps).ravel()
    # the residual at the true parameters is the gust: observed = -J d + eta
    return LinearModel(observed, -design, mean, precision, float(np.median(blocks.counts)) / blocks.counts)


def _smoothed(blocks: Blocks, values: FloatArray) -> FloatArray:
    """Running mean of block values over one turn, within each loiter."""
    smooth = values.copy()
    for index in np.unique(blocks.loiter).tolist():
        inside = np.flatnonzero(blocks.loiter == index)
        half = int(blocks.memory[index]) // 2
        total = np.concatenate([[0.0], np.cumsum(values[inside])])
        low = np.maximum(np.arange(inside.size) - half, 0)
        high = np.minimum(np.arange(inside.size) + half + 1, inside.size)
        smooth[inside] = (total[high] - total[low]) / (high - low)
    return smooth


def _directions(air_velocity_mps: FloatArray) -> FloatArray:
    return air_velocity_mps / np.maximum(np.linalg.norm(air_velocity_mps, axis=1), 1e-6)[:, None]


def _minutes_in_loiter(blocks: Blocks) -> FloatArray:
    time_s = blocks.mean(blocks.time_s)
    middle = np.zeros(blocks.memory.size)
    for index in np.unique(blocks.loiter).tolist():
        middle[index] = time_s[blocks.loiter == index].mean()
    return (time_s - middle[blocks.loiter]) / 60.0


def _loiter_means(blocks: Blocks, values: FloatArray, loiters: int) -> FloatArray:
    """Mean of block values by loiter; those without blocks get the mean of all."""
    count = np.bincount(blocks.loiter, minlength=loiters)
    total = np.bincount(blocks.loiter, weights=np.nan_to_num(values), minlength=loiters)
    overall = float(np.nan_to_num(values).mean())
    return np.where(count > 0, total / np.maximum(count, 1), overall)


def _wind_precision(series: AirDataSeries, blocks: Blocks, loiters: int) -> FloatArray:
    """Winds of loiters near in time and height are alike; their common level is free."""
    time_s = _loiter_means(blocks, blocks.mean(blocks.time_s), loiters)
    height = _loiter_means(blocks, blocks.mean(blocks.altitude_m), loiters)
    apart = (
        np.abs(time_s[:, None] - time_s) / WIND_CHANGE_TIME_S + np.abs(height[:, None] - height) / WIND_CHANGE_HEIGHT_M
    )
    covariance = WIND_CHANGE_MPS**2 * np.exp(-apart) + 1e-6 * np.eye(loiters) + UNKNOWN_WIND_MPS**2
    return np.kron(np.linalg.inv(covariance), np.eye(2))


def _air_path(series: AirDataSeries, blocks: Blocks, state: State) -> FloatArray:
    """(k, 3) positions in the air mass at the blocks' mean times. [m]"""
    time_s = series.gps_time_s
    middle = _loiter_means(blocks, blocks.mean(blocks.time_s), state.wind_mps.shape[0])
    order = np.argsort(middle)
    path = np.zeros((time_s.size, 3))
    for axis, velocity in enumerate((series.velocity_north_mps, series.velocity_east_mps, series.velocity_down_mps)):
        wind = np.interp(time_s, middle[order], state.wind_mps[order, axis]) if axis < 2 else 0.0
        air = velocity - wind
        path[1:, axis] = np.cumsum(0.5 * (air[1:] + air[:-1]) * np.diff(time_s))
    if np.isfinite(series.gps_altitude_m).all():
        path[:, 2] = -series.gps_altitude_m
    at = blocks.mean(blocks.time_s)
    return np.column_stack([np.interp(at, time_s, path[:, axis]) for axis in range(3)])


def _posterior(
    series: AirDataSeries,
    blocks: Blocks,
    loiters: Sequence[Loiter],
    state: State,
    now: Residuals,
    model: LinearModel,
) -> GustPosterior:
    position = _air_path(series, blocks, state)
    direction = _directions(blocks.mean(_directions(now.air_velocity_mps)))
    averaging = blocks.seconds * float(np.median(now.probe.speed_mps))
    north, east = (np.tile(axis, (direction.shape[0], 1)) for axis in np.eye(3)[:2])
    between = [
        GustGeometry(position, first, averaging, position, second)
        for first, second in ((direction, north), (direction, east), (north, north), (east, east))
    ]
    rms = max(float(np.sqrt(np.mean((model.observed - model.design @ model.prior_mean) ** 2))), RESIDUAL_FLOOR_MPS)
    rms = max(min(rms, 1.2 * float(np.sqrt(np.mean(model.observed**2)))), RESIDUAL_FLOOR_MPS)
    return gust_posterior(
        model,
        GustGeometry(position, direction, averaging),
        between,
        blocks.mean(blocks.time_s),
        _targets(blocks, loiters, model.design.shape[1]),
        rms,
    )


def _targets(blocks: Blocks, loiters: Sequence[Loiter], parameters: int) -> list[Target]:
    """Wind over path and time, north and east: of all used loiters by their time, then of each loiter."""
    shares = np.array(
        [
            (loiter.end_s - loiter.start_s) * (blocks.loiter == index).any() if loiter.used else 0.0
            for index, loiter in enumerate(loiters)
        ]
    )
    shares = shares / shares.sum()
    rows = [shares, *np.eye(len(loiters))]
    targets = []
    for row in rows:
        weights = np.zeros(blocks.loiter.size)
        for index in np.flatnonzero(row).tolist():
            inside = blocks.loiter == index
            if inside.any():
                weights[inside] = row[index] * blocks.counts[inside] / blocks.counts[inside].sum()
        for axis in (0, 1):
            coefficients = np.zeros(parameters)
            coefficients[FIRST_LOITER_COLUMN + axis : FIRST_LOITER_COLUMN + 2 * len(loiters) : 2] = row
            targets.append(Target(coefficients, weights, np.eye(3)[axis]))
    return targets


def _result(
    series: AirDataSeries,
    loiters: Sequence[Loiter],
    blocks: Blocks,
    probe: ProbeSpeed,
    state: State,
    posterior: GustPosterior,
    offset: OffsetPrior,
    offset_source: ZeroOffsetSource,
) -> FitResult:
    expected = posterior.expected()
    speed = float(np.median(np.linalg.norm(residuals(probe, blocks, state).air_velocity_mps, axis=1)))
    covariance = posterior.spread()
    cross_gust = 2 * CROSS_GUST_SHARE * posterior.intensity_mps**2 / max(speed, 1.0) ** 2
    density = log_density_uncertainty(series)
    extra = cross_gust**2 + density**2
    deviation = np.sqrt(posterior.covariance[:, 0, 0] + extra)
    log_low = mixture_quantile(posterior.weight, posterior.mean[:, 0], deviation, 0.025)
    log_high = mixture_quantile(posterior.weight, posterior.mean[:, 0], deviation, 0.975)
    scale_covariance = covariance[:2, :2].copy()
    scale_covariance[0, 0] += float(posterior.weight @ extra)
    wind = _winds(posterior, state, loiters, blocks)
    fitted = State(
        state.log_scale + float(expected[0]),
        state.zero_offset_pa + float(expected[1]),
        state.delay_s + float(expected[2]),
        state.wind_mps + expected[FIRST_LOITER_COLUMN : FIRST_LOITER_COLUMN + 2 * len(loiters)].reshape(-1, 2),
    )
    final = residuals(probe, blocks, fitted)
    zero_deviation = float(np.sqrt(covariance[1, 1]))
    fitted_zero = zero_deviation < 0.5 * offset.standard_uncertainty_pa
    altitude = _loiter_means(blocks, blocks.mean(blocks.altitude_m), len(loiters))
    speeds = _loiter_means(blocks, blocks.mean(final.probe.speed_mps), len(loiters))
    return FitResult(
        converged=bool(np.isfinite(expected).all()),
        pressure_scale=float(np.exp(fitted.log_scale)),
        zero_offset_pa=fitted.zero_offset_pa,
        covariance=scale_covariance,
        log_density_uncertainty=density,
        coverage_factor_95=(log_high - log_low) / (2 * float(np.sqrt(scale_covariance[0, 0]))),
        zero_offset_source=ZeroOffsetSource.FITTED if fitted_zero else offset_source,
        gps_delay_s=_normal_estimate(fitted.delay_s, float(np.sqrt(covariance[2, 2]))),
        wind=wind[0],
        wind_by_loiter=tuple(
            LoiterWind(index, float(altitude[index]), wind[1 + index])
            for index, loiter in enumerate(loiters)
            if loiter.used and (blocks.loiter == index).any()
        ),
        true_airspeed_by_loiter_mps=tuple(speeds.tolist()),
        heading_coverage_deg=_coverage(blocks, final),
        airspeed_range_mps=_airspeed_range(blocks, probe, fitted),
        gust_mps=float(posterior.weight @ posterior.intensity_mps),
        residual_rms_mps=float(np.sqrt(np.mean(blocks.mean(final.residual_mps) ** 2))),
        points=_points(blocks, final),
    )


def log_density_uncertainty(series: AirDataSeries) -> float:
    """Standard uncertainty of ln(density) from static pressure and temperature. [1]"""
    if series.time_s.size == 0:
        return 0.0
    pressure = series.static_uncertainty_pa / float(np.median(series.static_pressure_pa))
    temperature = series.temperature_uncertainty_k / float(np.median(series.air_temperature_k))
    return float(np.hypot(pressure, temperature))


def _normal_estimate(value: float, deviation: float) -> Estimate:
    return Estimate(value, deviation, (value - 1.96 * deviation, value + 1.96 * deviation))


def _mixture_estimate(weight: FloatArray, mean: FloatArray, deviation: FloatArray) -> Estimate:
    value = float(weight @ mean)
    spread = float(np.sqrt(weight @ (deviation**2 + (mean - value) ** 2)))
    interval = tuple(mixture_quantile(weight, mean, deviation, p) for p in (0.025, 0.975))
    return Estimate(value, spread, (interval[0], interval[1]))


def _winds(posterior: GustPosterior, state: State, loiters: Sequence[Loiter], blocks: Blocks) -> list[WindEstimate]:
    """Of all used loiters, then of each."""
    shares = np.array(
        [
            (loiter.end_s - loiter.start_s) * (blocks.loiter == index).any() if loiter.used else 0.0
            for index, loiter in enumerate(loiters)
        ]
    )
    base = [shares @ state.wind_mps / shares.sum(), *state.wind_mps]
    winds = []
    for index, level in enumerate(base):
        parts = []
        for axis in (0, 1):
            column = 2 * index + axis
            deviation = np.sqrt(np.maximum(posterior.target_variance[:, column], 1e-12))
            parts.append(_mixture_estimate(posterior.weight, posterior.target_mean[:, column] + level[axis], deviation))
        winds.append(wind_estimate(*parts))
    return winds


def wind_estimate(north: Estimate, east: Estimate) -> WindEstimate:
    """Speed and direction of the mean wind from its components; direction None when it may be any.

    The speed's interval is that of a vector known with the components' uncertainty: never below zero.
    """
    speed = float(np.hypot(north.value, east.value))
    variance = (
        ((north.value * north.standard_uncertainty) ** 2 + (east.value * east.standard_uncertainty) ** 2) / speed**2
        if speed > 0
        else north.standard_uncertainty**2 + east.standard_uncertainty**2
    )
    across = (
        ((east.value * north.standard_uncertainty) ** 2 + (north.value * east.standard_uncertainty) ** 2) / speed**2
        if speed > 0
        else np.inf
    )
    deviation, cross_deviation = float(np.sqrt(variance)), float(np.sqrt(across))
    factor = (north.interval_95[1] - north.interval_95[0]) / (2 * max(north.standard_uncertainty, 1e-12))
    interval = (max(speed - factor * deviation, 0.0), speed + factor * deviation)
    direction: Estimate | None = None
    if speed > factor * cross_deviation:
        from_deg = float(np.mod(np.degrees(np.arctan2(-east.value, -north.value)), 360.0))
        angle = float(np.degrees(cross_deviation / speed))
        direction = Estimate(from_deg, angle, (from_deg - factor * angle, from_deg + factor * angle))
    return WindEstimate(north, east, Estimate(speed, deviation, interval), direction)


def _heading_deg(final: Residuals, blocks: Blocks) -> FloatArray:
    direction = blocks.mean(_directions(final.air_velocity_mps))
    return np.mod(np.degrees(np.arctan2(direction[:, 1], direction[:, 0])), 360.0)


def _coverage(blocks: Blocks, final: Residuals) -> float:
    """360 degrees minus the largest gap between the air headings of all samples; blocks bridge their own width."""
    air = final.air_velocity_mps
    heading = np.sort(np.mod(np.degrees(np.arctan2(air[:, 1], air[:, 0])), 360.0))
    gaps = np.diff(np.concatenate([heading, heading[:1] + 360.0]))
    return float(360.0 - gaps.max())


def _airspeed_range(blocks: Blocks, probe: ProbeSpeed, fitted: State) -> tuple[float, float]:
    reading = blocks.mean(probe.reading_at(blocks.time_s, fitted.delay_s))
    impact = np.maximum(np.exp(fitted.log_scale) * (reading - fitted.zero_offset_pa), 0.0)
    speed = calibrated_airspeed_from_impact_pressure(impact)
    return float(np.min(speed)), float(np.max(speed))


def _points(blocks: Blocks, final: Residuals) -> FittedPoints:
    return FittedPoints(
        time_s=blocks.mean(blocks.time_s),
        loiter=blocks.loiter.astype(np.float64),
        heading_deg=_heading_deg(final, blocks),
        probe_true_airspeed_mps=blocks.mean(final.probe.speed_mps),
        wind_corrected_speed_mps=blocks.mean(np.linalg.norm(final.air_velocity_mps, axis=1)),
    )

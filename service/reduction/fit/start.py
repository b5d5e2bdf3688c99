"""Robust ordinary least squares of scale, zero offset and wind: where the gust model starts from.

Its covariance is the textbook one and several times too narrow in turbulence; it is never reported.
"""

from dataclasses import dataclass, replace

import numpy as np

from service.domain.arrays import FloatArray
from service.reduction.fit.blocks import Blocks
from service.reduction.fit.probe_speed import ProbeSpeed, SpeedAtGps

DELAYS_TRIED_S = np.concatenate([[0.0], np.arange(0.05, 0.96, 0.05)])
STARTING_NOISE_MPS = 0.5
OUTLIER_DEVIATIONS = 6.0
CLEAR_DELAY_SHARE = 0.7
"""A delay is taken from the data only where it brings the misfit below this share: gusts that push the aircraft mimic
small delays."""


@dataclass(frozen=True, slots=True)
class DelayPrior:
    """What is known of the GPS delay before the fit. [s]"""

    value_s: float
    standard_uncertainty_s: float


@dataclass(frozen=True, slots=True)
class OffsetPrior:
    """What is known of the zero offset before the fit. [Pa]"""

    value_pa: float
    standard_uncertainty_pa: float
    rectangular: bool = False
    """All values within the square root of 3 standard uncertainties are alike, none beyond (GUM 4.3.7)."""

    @property
    def reach_pa(self) -> float:
        """Half width of a rectangular one."""
        return float(self.standard_uncertainty_pa * 3.0**0.5)


@dataclass(frozen=True, slots=True)
class State:
    """Point about which the model is linear: ln K, zero offset, delay, and wind (number of loiters, 2) by loiter."""

    log_scale: float
    zero_offset_pa: float
    delay_s: float
    wind_mps: FloatArray


@dataclass(frozen=True, slots=True)
class Residuals:
    """Sample residuals (m,) probe minus wind-corrected speed, air velocity (m, 3), the probe's speed with slopes."""

    residual_mps: FloatArray
    air_velocity_mps: FloatArray
    probe: SpeedAtGps


def residuals(probe: ProbeSpeed, blocks: Blocks, state: State) -> Residuals:
    speed = probe.at(blocks.time_s, state.log_scale, state.zero_offset_pa, state.delay_s)
    air = blocks.velocity_mps.copy()
    air[:, :2] -= state.wind_mps[_sample_loiters(blocks)]
    return Residuals(speed.speed_mps - np.linalg.norm(air, axis=1), air, speed)


def start_state(probe: ProbeSpeed, blocks: Blocks, offset: OffsetPrior, delay: DelayPrior) -> State | None:
    """Robust solution; None where the readings can't be impact pressures of this flight at any scale."""
    common = _common_wind(blocks)
    loiters = int(blocks.memory.size)
    best: State | None = None
    best_rms = np.inf
    for initial in _initial_scales(probe, blocks, common, offset, delay):
        state = State(initial[0], initial[1], delay.value_s, np.tile(common, (loiters, 1)))
        state, rms = _iterate(probe, blocks, state, offset)
        if rms < best_rms:
            best, best_rms = state, rms
    return best


def without_outliers(probe: ProbeSpeed, blocks: Blocks, state: State) -> Blocks:
    """Blocks without samples that stand off their neighbours far beyond the spread of all."""
    residual = residuals(probe, blocks, state).residual_mps
    if residual.size < 10:
        return blocks
    off = np.abs(residual - _running_median(residual))
    spread = 1.4826 * float(np.median(off)) + 0.02
    total = np.abs(residual - np.median(residual))
    far = total > OUTLIER_DEVIATIONS * (1.4826 * float(np.median(total)) + 0.05)
    good = (off < OUTLIER_DEVIATIONS * spread) & ~far
    return blocks.keep(good) if good.sum() >= 8 else blocks


def clear_delay(probe: ProbeSpeed, blocks: Blocks, state: State, offset: OffsetPrior, delay: DelayPrior) -> DelayPrior:
    """The delay that the data show beyond doubt (quick changes of speed in calm air), else the prior."""

    def misfit(delays_s: FloatArray) -> FloatArray:
        return np.array(
            [_iterate(probe, blocks, replace(state, delay_s=tried), offset, steps=2)[1] for tried in delays_s.tolist()]
        )

    coarse = misfit(DELAYS_TRIED_S[::4])
    if coarse.min() > CLEAR_DELAY_SHARE**0.5 * float(np.interp(delay.value_s, DELAYS_TRIED_S[::4], coarse)):
        return delay
    rms = misfit(DELAYS_TRIED_S)
    at_prior = float(np.interp(delay.value_s, DELAYS_TRIED_S, rms))
    best = int(np.argmin(rms))
    if rms[best] > CLEAR_DELAY_SHARE * at_prior:
        return delay
    # width over which the mean square doubles, read off the scan; a quarter of it is a cautious deviation
    near = DELAYS_TRIED_S[rms**2 < 2 * rms[best] ** 2 + 1e-6]
    return DelayPrior(float(DELAYS_TRIED_S[best]), max(0.25 * float(near[-1] - near[0]), 0.01))


def _running_median(values: FloatArray, width: int = 7) -> FloatArray:
    if values.size < width:
        return np.full(values.size, float(np.median(values)))
    padded = np.pad(values, width // 2, mode="edge")
    return np.asarray(np.median(np.lib.stride_tricks.sliding_window_view(padded, width), axis=1))


def _sample_loiters(blocks: Blocks) -> FloatArray:
    return np.repeat(blocks.loiter, blocks.counts.astype(np.int64))


def _common_wind(blocks: Blocks) -> FloatArray:
    """(2,) centre of the circle of all velocities (algebraic fit)."""
    north, east = blocks.velocity_mps[:, 0], blocks.velocity_mps[:, 1]
    design = np.column_stack([2 * north, 2 * east, np.ones(north.size)])
    solution = np.linalg.lstsq(design, north**2 + east**2, rcond=None)[0]
    return np.asarray(solution[:2])


def _initial_scales(
    probe: ProbeSpeed, blocks: Blocks, wind: FloatArray, offset: OffsetPrior, delay: DelayPrior
) -> list[tuple[float, float]]:
    """(ln K, zero offset) to start from: at the prior's zero, and from the slope of V^2 where speeds differ."""
    reading = probe.reading_at(blocks.time_s, delay.value_s)
    reference = probe.at(blocks.time_s, 0.0, 0.0, delay.value_s)
    air = blocks.velocity_mps.copy()
    air[:, :2] -= wind
    square = np.sum(air**2, axis=1)
    # rho/2 from the reference: V^2 = 2 q / rho holds well enough to start from
    half_density = np.median(np.maximum(reading, 1e-3) / np.maximum(reference.speed_mps, 1e-3) ** 2)
    pressure = half_density * square
    starts = []
    signal = reading - offset.value_pa
    scale = float(pressure @ signal) / max(float(signal @ signal), 1e-12)
    if scale > 0:
        starts.append((float(np.log(scale)), offset.value_pa))
    if offset.standard_uncertainty_pa > 0.05 * float(np.median(np.abs(signal))):
        slope, intercept = np.polyfit(reading, pressure, 1) if np.ptp(reading) > 0 else (0.0, 0.0)
        if slope > 0:
            starts.append((float(np.log(slope)), float(-intercept / slope)))
    return starts


def _iterate(
    probe: ProbeSpeed, blocks: Blocks, state: State, offset: OffsetPrior, steps: int = 12
) -> tuple[State, float]:
    """Gauss-Newton with a step limit; the delay stays. Returns the state and the block residuals' rms."""
    loiters = state.wind_mps.shape[0]
    rms = np.inf
    for _ in range(steps):
        now = residuals(probe, blocks, state)
        observed = blocks.mean(now.residual_mps)
        jacobian = np.zeros((observed.size, 2 + 2 * loiters))
        jacobian[:, 0] = blocks.mean(now.probe.per_log_scale)
        jacobian[:, 1] = blocks.mean(now.probe.per_zero_offset)
        direction = now.air_velocity_mps / np.maximum(np.linalg.norm(now.air_velocity_mps, axis=1), 1e-6)[:, None]
        rows = np.arange(observed.size)
        jacobian[rows, 2 + 2 * blocks.loiter] = blocks.mean(direction[:, 0])
        jacobian[rows, 3 + 2 * blocks.loiter] = blocks.mean(direction[:, 1])
        deviation = max(min(rms, STARTING_NOISE_MPS), 1e-3)
        precision = np.zeros(jacobian.shape[1])
        precision[0] = 1e-4
        precision[1] = 1.0 / offset.standard_uncertainty_pa**2
        tie = np.zeros((jacobian.shape[1],) * 2)
        tie[2:, 2:] = _wind_tie(loiters)
        normal = jacobian.T @ jacobian / deviation**2 + np.diag(precision) + tie
        gradient = jacobian.T @ observed / deviation**2
        gradient[1] += (state.zero_offset_pa - offset.value_pa) * precision[1]
        gradient[2:] += tie[2:, 2:] @ state.wind_mps.ravel()
        step = -np.linalg.solve(normal, gradient)
        step[0] = np.clip(step[0], -0.7, 0.7)
        state = State(
            float(np.clip(state.log_scale + step[0], -6.0, 4.0)),
            state.zero_offset_pa + float(step[1]),
            state.delay_s,
            state.wind_mps + step[2:].reshape(-1, 2),
        )
        rms = float(np.sqrt(np.mean(observed**2)))
        if np.abs(step[0]) < 1e-7 and np.abs(step[2:]).max() < 1e-5:
            break
    return state, float(np.sqrt(np.mean(blocks.mean(residuals(probe, blocks, state).residual_mps) ** 2)))


def _wind_tie(loiters: int) -> FloatArray:
    """Precision that holds the loiters' winds within some 2 m/s of their mean, and any mean within 50 m/s of zero."""
    centring = np.eye(loiters) - np.full((loiters, loiters), 1.0 / loiters)
    precision = centring / 2.0**2 + np.full((loiters, loiters), 1.0 / loiters) / 50.0**2
    return np.kron(precision, np.eye(2))

"""The fit: pressure scale, zero offset, GPS delay and wind, with the uncertainty that correlated gusts leave.

Residual of a block: probe's true airspeed minus |ground velocity - wind|, which is minus the gust along the air
velocity (plus noise). Three measures against known biases (method notes, traps 1 to 4): the noisy GPS side is never the
regressor; slopes by scale, zero and delay are smoothed over one turn, so that quick changes of speed, which the gusts
push, carry no weight; the second-order effect of cross gusts is allowed for and its doubt carried.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import special

from service.airdata.gusts import GustGeometry
from service.airdata.headings import heading_coverage
from service.airdata.pitot import calibrated_airspeed_from_impact_pressure
from service.airdata.wind_triangle import direction_from_components
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
from service.reduction.fit.branches import FIXED_ZERO_PA, Branch, Joined, joined, zeros_to_try
from service.reduction.fit.drift import drifting_field
from service.reduction.fit.gust_posterior import (
    GustPosterior,
    LinearModel,
    disagreement,
    gust_posterior,
)
from service.reduction.fit.linear_model import (
    directions,
    linear_model,
    loiter_means,
    time_shares,
    wind_targets,
)
from service.reduction.fit.mixtures import mixture_estimate, normal_estimate, wind_from_components
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
FREE_OFFSET_PA = 1000.0
CLEAR_DEVIATIONS = 5.0
LEAST_SPEED_SPREAD = 0.05
"""Standard deviation over mean of the airspeed below which it tells nothing of the zero offset."""
CLEAR_GAIN = 0.25
"""Share of the mean square residual that a freed zero offset must leave to contradict what was assumed."""
LARGEST_LOG_SCALE = 20.0
"""Keeps senseless data within what a float can raise e to; any such scale is refused."""
RESIDUAL_FLOOR_MPS = 0.004
CROSS_GUST_EFFECT, CROSS_GUST_DOUBT = 0.27, 0.54
"""Mean residual left by gusts across the path, in units of intensity^2 / V, and its standard uncertainty (trap 4).

It is ((1 - 2 c_v) + r (1 - 2 c_w)) / 2 for the shares c of the sideways and vertical gusts that the aircraft follows
and the ratio r = 0.8 of vertical to horizontal gust variance. Guidance that holds a circle and a height follows little
of the slow gusts that carry most of the variance, a free aircraft nearly all: c = 0.35 +- 0.3."""
UNLIKELY_SCATTER = 0.03
"""Chance below which the scatter of the loiters' scales widens the interval."""
GPS_DRIFT_MPS = 0.007
"""What is left of a receiver's slow velocity error after minutes: about 0.01 kt (check values, section h)."""
COUPLING = 1.08
"""The aircraft answers the gusts that it measures and does not fly on rails through them: in simulated flights the
errors of the wind were by so much larger than along the same paths through fresh fields."""
FITTED_ZERO_SHARE = 0.5
"""The zero counts as fitted where the data halve its prior uncertainty."""


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
    blocks = blocks.keep(probe.covers(blocks.time_s, delay.value_s))
    if blocks.starts.size < FEWEST_BLOCKS:
        return _too_few(f"GPS and usable probe samples meet in {blocks.starts.size} stretches of the loiters only")
    state = start_state(probe, blocks, offset, delay)
    if state is None:
        return ReasonGiven(
            Reason.PROBE_FAULT,
            "The readings do not rise with airspeed at any scale: look for blocked or swapped tubes.",
        )
    blocks = without_outliers(probe, blocks, state)
    return PreliminaryFit(probe, blocks, start_state(probe, blocks, offset, delay) or state)


def contradicts_zero(preliminary: PreliminaryFit, offset: OffsetPrior, delay: DelayPrior) -> bool:
    """Whether speeds flown far apart say that the zero offset is nowhere near its prior."""
    probe, blocks = preliminary.probe, preliminary.blocks
    speed = residuals(probe, blocks, preliminary.state).probe.speed_mps
    if float(np.std(speed)) < LEAST_SPEED_SPREAD * float(np.mean(speed)):
        return False
    free = start_state(probe, blocks, OffsetPrior(offset.value_pa, FREE_OFFSET_PA), delay)
    if free is None or abs(free.zero_offset_pa - offset.value_pa) < CLEAR_DEVIATIONS * offset.standard_uncertainty_pa:
        return False
    held, freed = (
        float(np.mean(blocks.mean(residuals(probe, blocks, state).residual_mps) ** 2))
        for state in (preliminary.state, free)
    )
    return freed < CLEAR_GAIN * held


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

    def branch(prior: OffsetPrior, weight: float = 1.0) -> Branch:
        state = start_state(probe, blocks, prior, delay) or preliminary.state
        return _branch(series, loiters, preliminary, state, prior, delay, weight)

    branches = [branch(offset)]
    signal_pa = float(np.median(probe.reading_at(blocks.time_s, branches[0].state.delay_s)))
    zeros = zeros_to_try(offset, branches[0], signal_pa)
    if zeros:
        branches = [branch(OffsetPrior(zero_pa, FIXED_ZERO_PA), weight) for zero_pa, weight in zeros]
    return _result(series, loiters, preliminary, joined(branches), offset, offset_source)


def _branch(
    series: AirDataSeries,
    loiters: Sequence[Loiter],
    preliminary: PreliminaryFit,
    state: State,
    offset: OffsetPrior,
    delay: DelayPrior,
    weight: float,
) -> Branch:
    """The posterior about one state."""
    probe, blocks = preliminary.probe, preliminary.blocks
    now = residuals(probe, blocks, state)
    model = linear_model(blocks, probe, state, now, offset, delay)
    rms = max(float(np.sqrt(np.mean(model.observed**2))), RESIDUAL_FLOOR_MPS)
    gust = drifting_field(series, blocks, state, now, model, rms)
    posterior = gust_posterior(model, gust, wind_targets(blocks, loiters), rms)
    consistency, widening = _loiters_agree(blocks, model, gust, posterior)
    shares = time_shares(blocks, loiters)
    return Branch(weight, state, posterior, shares, float(np.median(now.probe.speed_mps)), consistency, widening)


def _loiters_agree(
    blocks: Blocks, model: LinearModel, gust: GustGeometry, posterior: GustPosterior
) -> tuple[float, float]:
    """Chance that loiters of one scale scatter as these do, and the variance factor for those that scatter too much.

    Birge's ratio: where the loiters' own scales differ beyond what the gusts explain (a probe that feels speed, slip or
    flow angle), the variance is raised by chi-square over its degrees of freedom.
    """
    present = np.unique(blocks.loiter)
    extra = np.column_stack(
        [np.where(blocks.loiter == index, model.design[:, 0], 0.0) for index in present[1:].tolist()]
        or [np.empty((blocks.loiter.size, 0))]
    )
    best = int(np.argmax(posterior.weight))
    square = disagreement(
        model,
        extra,
        gust,
        float(posterior.intensity_mps[best]),
        float(posterior.noise_mps[best]),
        float(posterior.length_m[best]),
    )
    freedom = present.size - 1
    if freedom == 0:
        return 1.0, 1.0
    chance = float(special.chdtrc(freedom, square))
    return chance, max(square / freedom, 1.0) if chance < UNLIKELY_SCATTER else 1.0


def _result(
    series: AirDataSeries,
    loiters: Sequence[Loiter],
    preliminary: PreliminaryFit,
    found: Joined,
    offset: OffsetPrior,
    offset_source: ZeroOffsetSource,
) -> FitResult:
    probe, blocks = preliminary.probe, preliminary.blocks
    scale = _log_scale(series, found)
    zero_pa, zero_deviation_pa = found.moments(found.zero_offset_pa, found.covariance[:, 1, 1])
    delay_s, delay_deviation_s = found.moments(found.delay_s, found.covariance[:, 2, 2])
    fitted = State(
        float(np.clip(scale.value, -LARGEST_LOG_SCALE, LARGEST_LOG_SCALE)),
        zero_pa,
        delay_s,
        np.tensordot(found.weight, found.wind_mps, axes=1),
    )
    final = residuals(probe, blocks, fitted)
    common = found.common_variance(found.log_scale, found.zero_offset_pa, found.covariance[:, 0, 1])
    winds = _winds(found)
    altitude = loiter_means(blocks, blocks.mean(blocks.altitude_m), len(loiters))
    zero_found = zero_deviation_pa < FITTED_ZERO_SHARE * offset.standard_uncertainty_pa
    return FitResult(
        converged=bool(np.isfinite(found.log_scale).all() and np.isfinite(found.covariance).all()),
        pressure_scale=float(np.exp(fitted.log_scale)),
        zero_offset_pa=zero_pa,
        covariance=np.array([[scale.standard_uncertainty**2, common], [common, zero_deviation_pa**2]]),
        log_density_uncertainty=log_density_uncertainty(series),
        coverage_factor_95=(scale.interval_95[1] - scale.interval_95[0]) / (2 * scale.standard_uncertainty),
        zero_offset_source=ZeroOffsetSource.FITTED if zero_found else offset_source,
        gps_delay_s=normal_estimate(delay_s, delay_deviation_s),
        wind=winds[0],
        wind_by_loiter=tuple(
            LoiterWind(index, float(altitude[index]), winds[1 + index])
            for index in range(len(loiters))
            if (blocks.loiter == index).any()
        ),
        true_airspeed_by_loiter_mps=tuple(
            loiter_means(blocks, blocks.mean(final.probe.speed_mps), len(loiters)).tolist()
        ),
        heading_coverage_deg=heading_coverage(direction_from_components(*final.air_velocity_mps[:, :2].T)),
        airspeed_range_mps=_airspeed_range(blocks, probe, fitted),
        loiters_agree=found.consistency,
        gust_mps=float(found.weight @ found.intensity_mps),
        residual_rms_mps=float(np.sqrt(np.mean(blocks.mean(final.residual_mps) ** 2))),
        points=_points(blocks, final),
    )


def log_density_uncertainty(series: AirDataSeries) -> float:
    """Standard uncertainty of ln(density) from static pressure and temperature. [1]"""
    pressure = series.static_uncertainty_pa / float(np.median(series.static_pressure_pa))
    temperature = series.temperature_uncertainty_k / float(np.median(series.air_temperature_k))
    return float(np.hypot(pressure, temperature))


def _log_scale(series: AirDataSeries, found: Joined) -> Estimate:
    """ln K: gusts, zero offset, cross gusts, density."""
    # cross gusts raise the mean residual; unheeded, ln K would come out lower by 2 / V of that
    per_share = 2 * (found.intensity_mps / max(found.airspeed_mps, 1.0)) ** 2
    variance = found.widening * found.covariance[:, 0, 0] + (CROSS_GUST_DOUBT * per_share) ** 2
    variance += log_density_uncertainty(series) ** 2
    return mixture_estimate(found.weight, found.log_scale + CROSS_GUST_EFFECT * per_share, np.sqrt(variance))


def _winds(found: Joined) -> list[WindEstimate]:
    """Of all used loiters, then of each."""
    deviations = np.sqrt(COUPLING**2 * found.mean_wind_variance + GPS_DRIFT_MPS**2)
    return [
        wind_from_components(
            *(
                mixture_estimate(found.weight, found.mean_wind_mps[:, index, axis], deviations[:, index, axis])
                for axis in (0, 1)
            )
        )
        for index in range(deviations.shape[1])
    ]


def _airspeed_range(blocks: Blocks, probe: ProbeSpeed, fitted: State) -> tuple[float, float]:
    reading = blocks.mean(probe.reading_at(blocks.time_s, fitted.delay_s))
    impact = np.maximum(np.exp(fitted.log_scale) * (reading - fitted.zero_offset_pa), 0.0)
    speed = calibrated_airspeed_from_impact_pressure(impact)
    return float(np.min(speed)), float(np.max(speed))


def _points(blocks: Blocks, final: Residuals) -> FittedPoints:
    direction = blocks.mean(directions(final.air_velocity_mps))
    return FittedPoints(
        time_s=blocks.mean(blocks.time_s),
        loiter=blocks.loiter.astype(np.float64),
        heading_deg=direction_from_components(direction[:, 0], direction[:, 1]),
        probe_true_airspeed_mps=blocks.mean(final.probe.speed_mps),
        wind_corrected_speed_mps=blocks.mean(np.linalg.norm(final.air_velocity_mps, axis=1)),
    )

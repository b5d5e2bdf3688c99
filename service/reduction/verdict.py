"""Fit -> calibration: the estimates in the contract's three conventions, and a verdict with its reasons."""

from collections.abc import Sequence

import numpy as np

from service.domain.codes import Direction, Reason, Verdict, ZeroOffsetSource
from service.domain.results import (
    AirDataSeries,
    Calibration,
    Estimate,
    FitResult,
    Loiter,
    ReasonGiven,
    ZeroOffset,
)
from service.domain.settings import ProbeSettings

ACCEPTED_HALF_WIDTH = 0.015
"""Half width of the 95 % interval of the speed scale below which a factor may be loaded: 1.5 % of airspeed is under a
third of the 5 % by which certificated systems must warn above the stall (check values, section f)."""
LEAST_COVERAGE_DEG = 230.0
WIDEST_HALF_WIDTH = 0.3
"""Beyond it the number says nothing that a glance at the probe would not."""
SCALE_RANGE = (0.05, 5.0)
LARGEST_RESIDUAL_SHARE = 0.25
"""Of the airspeed: probe and GPS then don't tell of one motion."""
DISAGREEING_LOITERS = 0.003
"""Chance of the loiters' scatter below which they contradict one another."""
FEW_TURNS = 3.0
STALE_AIR_MPS = 1.5
"""Mean wind below which circles over one spot meet the same gusts again."""
WEIGHTY = frozenset(
    {Reason.INTERVAL_WIDE, Reason.SCALE_CHANGED, Reason.LOITERS_DISAGREE, Reason.ZERO_OFFSET_CONTRADICTED}
)
"""Reasons that make a calibration doubtful; the others are remarks."""


def refused(reasons: Sequence[ReasonGiven], source: ZeroOffsetSource = ZeroOffsetSource.PRIOR) -> Calibration:
    """A calibration that could not be made, with the reasons."""
    return Calibration(
        verdict=Verdict.REFUSED,
        reasons=tuple(reasons),
        speed_scale=None,
        pressure_scale=None,
        total_speed_scale=None,
        accepted_half_width=ACCEPTED_HALF_WIDTH,
        zero_offset_pa=None,
        zero_offset_source=source,
        gps_delay_s=None,
        airspeed_range_mps=None,
        gust_mps=None,
        residual_rms_mps=None,
    )


def refusal_of(fit: FitResult) -> ReasonGiven | None:
    """Why a finished fit is no calibration; None when it is one."""
    speed_scale = _power(fit, 0.5)
    half_width = _half_width(speed_scale)
    airspeed = float(np.median(fit.points.probe_true_airspeed_mps))
    if not fit.converged or not np.isfinite(half_width):
        return ReasonGiven(Reason.NOT_CONVERGED, "The fit did not converge on this flight.")
    if fit.heading_coverage_deg < LEAST_COVERAGE_DEG:
        return coverage_reason(fit.heading_coverage_deg)
    if not SCALE_RANGE[0] <= fit.pressure_scale <= SCALE_RANGE[1]:
        return ReasonGiven(
            Reason.SCALE_OUT_OF_RANGE,
            f"A pressure scale of {fit.pressure_scale:.3g} lies outside {SCALE_RANGE[0]} to {SCALE_RANGE[1]}: "
            "the readings are not the impact pressure of this flight.",
        )
    if fit.residual_rms_mps > LARGEST_RESIDUAL_SHARE * airspeed:
        return ReasonGiven(
            Reason.RESIDUALS,
            f"Probe and GPS disagree by {fit.residual_rms_mps:.1f} m/s (root mean square) at {airspeed:.0f} m/s: "
            "they do not tell of one motion.",
        )
    if half_width > WIDEST_HALF_WIDTH * speed_scale.value:
        return ReasonGiven(
            Reason.INTERVAL_WIDE,
            f"The speed scale is known to ±{100 * half_width / speed_scale.value:.0f} % only: "
            "fly more circles, in calmer air, with ground time for the zero offset.",
        )
    return None


def coverage_reason(coverage_deg: float) -> ReasonGiven:
    return ReasonGiven(
        Reason.HEADING_COVERAGE,
        f"The air headings cover {coverage_deg:.0f}° of the {LEAST_COVERAGE_DEG:.0f}° that a calibration needs: "
        "fly whole circles, or legs on at least three headings about 120° apart.",
    )


def calibration_of(
    fit: FitResult,
    series: AirDataSeries,
    loiters: Sequence[Loiter],
    zero: ZeroOffset,
    settings: ProbeSettings,
    remarks: Sequence[ReasonGiven],
) -> Calibration:
    """Accepted or doubtful; `remarks` are given beside the fit's own doubts."""
    speed_scale = _power(fit, 0.5)
    reasons = [*_doubts(fit, series, loiters, zero, speed_scale), *remarks]
    doubtful = any(reason.code in WEIGHTY for reason in reasons)
    zero_deviation = float(np.sqrt(fit.covariance[1, 1]))
    reach = fit.coverage_factor_95 * zero_deviation
    return Calibration(
        verdict=Verdict.DOUBTFUL if doubtful else Verdict.ACCEPTED,
        reasons=tuple(reasons),
        speed_scale=speed_scale,
        pressure_scale=_power(fit, 1.0),
        total_speed_scale=_power(fit, 0.5, settings.applied_speed_scale),
        accepted_half_width=ACCEPTED_HALF_WIDTH,
        zero_offset_pa=Estimate(
            fit.zero_offset_pa, zero_deviation, (fit.zero_offset_pa - reach, fit.zero_offset_pa + reach)
        ),
        zero_offset_source=fit.zero_offset_source,
        gps_delay_s=fit.gps_delay_s,
        airspeed_range_mps=fit.airspeed_range_mps,
        gust_mps=fit.gust_mps,
        residual_rms_mps=fit.residual_rms_mps,
    )


def _power(fit: FitResult, exponent: float, factor: float = 1.0) -> Estimate:
    """factor * K^exponent; its interval is that of ln K, so it never reaches zero."""
    log_deviation = exponent * float(np.sqrt(fit.covariance[0, 0]))
    value = factor * float(fit.pressure_scale**exponent)
    # a reach beyond 100 is refused anyhow, and must not overflow before that
    reach = min(fit.coverage_factor_95 * log_deviation, 100.0)
    return Estimate(value, value * log_deviation, (value * float(np.exp(-reach)), value * float(np.exp(reach))))


def _half_width(estimate: Estimate) -> float:
    return 0.5 * (estimate.interval_95[1] - estimate.interval_95[0])


def _doubts(
    fit: FitResult, series: AirDataSeries, loiters: Sequence[Loiter], zero: ZeroOffset, speed_scale: Estimate
) -> list[ReasonGiven]:
    doubts = []
    half_width = _half_width(speed_scale)
    if half_width >= ACCEPTED_HALF_WIDTH:
        doubts.append(
            ReasonGiven(
                Reason.INTERVAL_WIDE,
                f"The 95 % interval of the speed scale is ±{half_width:.3f}, wider than ±{ACCEPTED_HALF_WIDTH}: "
                f"{_remedy(fit)}.",
            )
        )
    if half_width >= ACCEPTED_HALF_WIDTH and fit.wind.speed_mps.value < STALE_AIR_MPS:
        doubts.append(
            ReasonGiven(
                Reason.STALE_AIR,
                f"The wind of {fit.wind.speed_mps.value:.1f} m/s hardly carries fresh air through the loiters, so "
                "circles over one spot meet the same gusts again: fly at another place or height.",
            )
        )
    if fit.loiters_agree < DISAGREEING_LOITERS:
        doubts.append(
            ReasonGiven(
                Reason.LOITERS_DISAGREE,
                "The scale differs from loiter to loiter by more than the gusts explain: look for a probe that feels "
                "speed, slip or moisture, and fly again.",
            )
        )
    turns = sum(loiter.turns for loiter in loiters if loiter.used and loiter.direction is not Direction.STRAIGHT)
    if turns < FEW_TURNS:
        doubts.append(
            ReasonGiven(Reason.FEW_CIRCLES, f"Only {turns:.1f} turns of circles: more of them narrow the interval.")
        )
    if fit.zero_offset_source is ZeroOffsetSource.PRIOR:
        doubts.append(
            ReasonGiven(
                Reason.ZERO_OFFSET_ASSUMED,
                f"The zero offset is assumed to be {zero.value_pa:.1f} ± {zero.standard_uncertainty_pa:.1f} Pa: "
                "record some seconds at rest before take-off, or give it.",
            )
        )
    if series.standard_temperature:
        doubts.append(
            ReasonGiven(
                Reason.STANDARD_TEMPERATURE,
                "No air temperature was given: the standard atmosphere's is used, "
                f"±{series.temperature_uncertainty_k:.0f} K.",
            )
        )
    if series.standard_static:
        doubts.append(
            ReasonGiven(
                Reason.STANDARD_STATIC,
                "No static pressure was given: the standard atmosphere's at the GPS altitude is used.",
            )
        )
    return doubts


def _remedy(fit: FitResult) -> str:
    """What would narrow the interval most."""
    scale = float(np.sqrt(fit.covariance[0, 0]))
    pressure = float(np.median(fit.points.probe_true_airspeed_mps)) ** 2 * 0.6 / fit.pressure_scale
    from_zero = float(np.sqrt(fit.covariance[1, 1])) / max(pressure, 1e-9)
    if fit.log_density_uncertainty > 0.6 * scale:
        return "give the air temperature and static pressure"
    if from_zero > 0.6 * scale:
        return "record the zero offset at rest before take-off, or give it"
    return "fly more circles, in calmer air or at more than one height"

"""The way through the house: a decoded log and settings -> a reduction. One function per use case.

Files in `service/reduction` never import one another; they meet here.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from service.domain.arrays import BoolArray
from service.domain.codes import Reason, Verdict
from service.domain.log import DecodedLog
from service.domain.results import (
    AirDataSeries,
    Calibration,
    CorrectedSeries,
    Fault,
    FaultReport,
    FitResult,
    Inputs,
    Loiter,
    ReasonGiven,
    Reduction,
    StallMargins,
    StallWarning,
    ZeroOffset,
)
from service.domain.settings import Settings
from service.reduction.configuration import configuration_in_force
from service.reduction.correction import corrected_series
from service.reduction.faults import find_faults, find_scale_step
from service.reduction.fit import (
    DelayPrior,
    OffsetPrior,
    PreliminaryFit,
    contradicts_zero,
    fit_scale_and_wind,
    preliminary_fit,
)
from service.reduction.gps_delay import GpsDelay, delay_from_heading, prior_delay
from service.reduction.load_factor import load_factor_at
from service.reduction.loiters import find_loiters, joint_coverage
from service.reduction.margins import stall_margins
from service.reduction.phases import find_ground_phases
from service.reduction.series import build_series
from service.reduction.stall_warnings import stall_warnings
from service.reduction.verdict import LEAST_COVERAGE_DEG, calibration_of, coverage_reason, refusal_of, refused
from service.reduction.zero import WindAloft, rest_readings, unknown_zero_offset, zero_offset

Progress = Callable[[float], None]

MOST_LOITERS = 16
"""Loiters that one fit takes; more, of very long flights or of a client's windows, are thinned evenly."""


@dataclass(frozen=True, slots=True)
class _Outcome:
    """What the search for a calibration ends with; `fit` is None when refused."""

    calibration: Calibration
    loiters: tuple[Loiter, ...]
    fit: FitResult | None
    faults: FaultReport
    zero: ZeroOffset


def reduce_flight(log: DecodedLog, settings: Settings, *, progress: Progress | None = None) -> Reduction:
    """Reduce one flight.

    Never raises for what a flight holds: a flight without an answer is refused, with reasons.

    Parameters
    ----------
    progress : called with the share done, 0 to 1.
    """
    told = progress or _silent
    told(0.0)
    if log.probe is None:
        calibration = refused([ReasonGiven(Reason.NO_PROBE, "The log holds no pressure of an airspeed probe.")])
        return _without_probe(log, calibration)
    phases = find_ground_phases(log)
    series = build_series(log, log.probe, phases.ground_s, phases.rest_s)
    faults = find_faults(
        series,
        log_gaps=log.gaps,
        sensors=log.sensors,
        full_scale_pa=settings.probe.full_scale_pa,
        given_zero_pa=settings.probe.zero_offset_pa,
        static=log.static,
    )
    told(0.2)
    outcome = _calibrate(log, series, settings, faults)
    told(0.8)
    faulty = outcome.faults.probe_faulty | outcome.faults.static_faulty
    corrected = corrected_series(series, outcome.fit, settings.probe, faulty, outcome.zero.value_pa)
    margins, absent, warnings, load_factor_source = _margins(log, series, settings, outcome, corrected)
    told(1.0)
    return Reduction(
        calibration=outcome.calibration,
        wind=outcome.fit.wind if outcome.fit else None,
        wind_by_loiter=outcome.fit.wind_by_loiter if outcome.fit else (),
        loiters=outcome.loiters,
        airspeed=corrected,
        stall_margins=margins,
        stall_margins_absent=absent,
        stall_warnings=warnings,
        faults=outcome.faults.faults,
        inputs=_inputs(log, series, load_factor_source),
    )


def _silent(_share: float) -> None:
    """No progress wanted."""


# --- calibration ------------------------------------------------------------------------------------------------------


def _calibrate(log: DecodedLog, series: AirDataSeries, settings: Settings, faults: FaultReport) -> _Outcome:
    usable = np.isfinite(series.reading_pa) & ~(faults.probe_faulty | faults.static_faulty)
    rests = rest_readings(series, usable, log.attitude)
    zero = zero_offset(series, settings.probe, rests, None)
    found = find_loiters(series, settings.loiters)
    picked = _picked(len(found))
    loiters = tuple(found[index] for index in picked)
    remarks = _remarks(log, faults)

    def without_answer(reason: ReasonGiven) -> _Outcome:
        others = [remark for remark in remarks if remark.code is not reason.code]
        return _Outcome(refused([reason, *others], zero.source), found, None, faults, zero)

    reason = _holds_nothing(log, series, usable, faults, loiters)
    if reason is not None:
        return without_answer(reason)
    first = _first_fit(series, usable, loiters, zero)
    if isinstance(first, ReasonGiven):
        return without_answer(first)
    assumed = zero_offset(series, settings.probe, rests, _wind_aloft(series, first))
    zero, contradiction = _zero_in_view_of(first, assumed)
    fit = _full_fit(log, series, loiters, zero, first)
    step = find_scale_step(fit.points, loiters, fit, series=series, usable=usable)
    if step is not None:
        faults = _with_step(series, faults, step)
        remarks.insert(0, ReasonGiven(Reason.SCALE_CHANGED, step.message))
        first = _first_fit(series, usable & ~faults.probe_faulty, loiters, assumed)
        if isinstance(first, ReasonGiven):
            return without_answer(first)
        # what looked like a wrong zero may have been the leak: judge the zero again without it
        zero, contradiction = _zero_in_view_of(first, assumed)
        fit = _full_fit(log, series, loiters, zero, first)
    if contradiction is not None:
        remarks.insert(0, contradiction)
    refusal = refusal_of(fit)
    if refusal is not None:
        return without_answer(refusal)
    calibration = calibration_of(fit, series, loiters, zero, settings.probe, remarks)
    loiters = _with_fitted_speed(loiters, fit)
    return _Outcome(calibration, _put_back(loiters, picked, found), _renumbered(fit, picked), faults, zero)


def _picked(count: int) -> list[int]:
    """Indices of the loiters that serve, evenly spread: the work grows with the cube of their number."""
    if count <= MOST_LOITERS:
        return list(range(count))
    return [index * (count - 1) // (MOST_LOITERS - 1) for index in range(MOST_LOITERS)]


def _put_back(loiters: tuple[Loiter, ...], picked: list[int], found: tuple[Loiter, ...]) -> tuple[Loiter, ...]:
    """All that were found; those that were not picked are not used."""
    served = dict(zip(picked, loiters, strict=True))
    return tuple(served.get(index, replace(loiter, used=False)) for index, loiter in enumerate(found))


def _renumbered(fit: FitResult, picked: list[int]) -> FitResult:
    """Winds by the numbers of all loiters found."""
    return replace(fit, wind_by_loiter=tuple(replace(wind, loiter=picked[wind.loiter]) for wind in fit.wind_by_loiter))


def _holds_nothing(
    log: DecodedLog, series: AirDataSeries, usable: BoolArray, faults: FaultReport, loiters: tuple[Loiter, ...]
) -> ReasonGiven | None:
    """Why no fit is worth trying; None when one is."""
    if log.gps is None:
        return ReasonGiven(Reason.NO_GPS, "The log holds no GPS velocity.")
    if series.gps_time_s.size == 0:
        return ReasonGiven(Reason.NO_FIX, "The GPS never had a valid fix.")
    airborne = ~series.on_ground
    if series.gps_on_ground.all() or not airborne.any():
        return ReasonGiven(Reason.NOT_AIRBORNE, "The aircraft stayed on the ground.")
    if not (airborne & np.isfinite(series.reading_pa)).any():
        return ReasonGiven(Reason.TOO_FEW_SAMPLES, "The probe has no sample in the air.")
    if series.gps_time_s[-1] < series.time_s[0] or series.gps_time_s[0] > series.time_s[-1]:
        return ReasonGiven(Reason.NO_OVERLAP, "Probe and GPS were not recorded at the same time.")
    if not (airborne & usable).any():
        return _fault_reason(faults)
    if not loiters:
        return ReasonGiven(Reason.TOO_FEW_SAMPLES, "The GPS has too few samples in the air.")
    coverage = max(loiter.heading_coverage_deg for loiter in loiters)
    if coverage < LEAST_COVERAGE_DEG:
        coverage = joint_coverage(series, loiters)
    if coverage < LEAST_COVERAGE_DEG:
        return coverage_reason(coverage)
    in_loiters = np.zeros(series.time_s.size, dtype=bool)
    for loiter in loiters:
        in_loiters |= (series.time_s >= loiter.start_s) & (series.time_s <= loiter.end_s)
    if in_loiters.any() and not (in_loiters & usable & airborne).any():
        return _fault_reason(faults)
    return None


def _fault_reason(faults: FaultReport) -> ReasonGiven:
    static_only = bool(faults.static_faulty.all()) and not faults.probe_faulty.all()
    code = Reason.STATIC_FAULT if static_only else Reason.PROBE_FAULT
    longest = max(faults.faults, key=lambda fault: fault.end_s - fault.start_s, default=None)
    return ReasonGiven(code, longest.message if longest else "The probe gave no usable reading in flight.")


def _zero_in_view_of(first: PreliminaryFit, assumed: ZeroOffset) -> tuple[ZeroOffset, ReasonGiven | None]:
    """The zero to fit with, and what to say where the speeds flown contradict the one assumed."""
    if contradicts_zero(first, _offset_prior(assumed), _delay_prior(prior_delay())):
        return unknown_zero_offset(), _contradiction(assumed)
    return assumed, None


def _contradiction(zero: ZeroOffset) -> ReasonGiven:
    return ReasonGiven(
        Reason.ZERO_OFFSET_CONTRADICTED,
        f"The speeds flown contradict the zero offset of {zero.value_pa:.1f} ± {zero.standard_uncertainty_pa:.1f} Pa "
        f"({zero.source}); it was fitted instead. Record it at rest before take-off.",
    )


def _first_fit(
    series: AirDataSeries, usable: BoolArray, loiters: tuple[Loiter, ...], zero: ZeroOffset
) -> PreliminaryFit | ReasonGiven:
    airborne = usable & ~series.on_ground
    return preliminary_fit(series, airborne, loiters, _offset_prior(zero), _delay_prior(prior_delay()))


def _full_fit(
    log: DecodedLog, series: AirDataSeries, loiters: tuple[Loiter, ...], zero: ZeroOffset, first: PreliminaryFit
) -> FitResult:
    delay = delay_from_heading(first.blocks.time_s, first.air_heading_rad(), first.turn_numbers(), log.attitude)
    return fit_scale_and_wind(series, loiters, first, _offset_prior(zero), zero.source, _delay_prior(delay))


def _offset_prior(zero: ZeroOffset) -> OffsetPrior:
    return OffsetPrior(zero.value_pa, zero.standard_uncertainty_pa, zero.rectangular)


def _delay_prior(delay: GpsDelay) -> DelayPrior:
    return DelayPrior(delay.value_s, delay.standard_uncertainty_s)


def _wind_aloft(series: AirDataSeries, first: PreliminaryFit) -> WindAloft | None:
    """Wind of the preliminary fit and its height above the resting height."""
    if not series.at_rest.any():
        return None
    north, east = first.state.wind_mps.mean(axis=0).tolist()
    rest_pa = float(np.median(series.static_pressure_pa[series.at_rest]))
    air_pa = float(np.median(series.static_pressure_pa[~series.on_ground]))
    # 8.4 km: scale height of the lower atmosphere
    height_m = 8400.0 * float(np.log(rest_pa / air_pa))
    return WindAloft(north, east, max(height_m, 5.0))


def _with_step(series: AirDataSeries, faults: FaultReport, step: Fault) -> FaultReport:
    spoilt = (series.time_s >= step.start_s) & (series.time_s <= step.end_s)
    return replace(faults, faults=(*faults.faults, step), probe_faulty=faults.probe_faulty | spoilt)


def _with_fitted_speed(loiters: tuple[Loiter, ...], fit: FitResult) -> tuple[Loiter, ...]:
    served = {wind.loiter for wind in fit.wind_by_loiter}
    return tuple(
        replace(loiter, true_airspeed_mps=speed, used=index in served)
        for index, (loiter, speed) in enumerate(zip(loiters, fit.true_airspeed_by_loiter_mps, strict=True))
    )


def _remarks(log: DecodedLog, faults: FaultReport) -> list[ReasonGiven]:
    remarks = []
    if faults.faults:
        remarks.append(
            ReasonGiven(Reason.PROBE_FAULT, "Spans with sensor faults were left out of the fit; see the faults.")
        )
    if log.time_steps_back:
        remarks.append(
            ReasonGiven(
                Reason.TIME_STEPS_BACK,
                f"{log.time_steps_back} samples stood before their predecessors and were sorted.",
            )
        )
    if log.truncated:
        remarks.append(ReasonGiven(Reason.TRUNCATED, "The log is cut short: what is there was used."))
    return remarks


# --- margins and inputs -----------------------------------------------------------------------------------------------


def _margins(
    log: DecodedLog, series: AirDataSeries, settings: Settings, outcome: _Outcome, corrected: CorrectedSeries
) -> tuple[StallMargins | None, str | None, tuple[StallWarning, ...], str | None]:
    fit = outcome.fit
    delay = fit.gps_delay_s.value if fit is not None and fit.gps_delay_s is not None else 0.0
    load_factor = load_factor_at(series, log.load_factor, log.attitude, settings.aircraft.maximum_bank_deg, delay)
    in_force = configuration_in_force(series.time_s, settings.aircraft.configurations, settings.configuration_times)
    coverage = {} if fit is None else {"coverage_factor_95": fit.coverage_factor_95}
    margins, absent = stall_margins(corrected, load_factor, settings.aircraft, in_force, **coverage)
    if margins is None:
        return None, absent, (), load_factor.source
    margins, warnings = stall_warnings(margins, in_force, settings.aircraft, settings.warnings)
    return margins, None, warnings, load_factor.source


def _without_probe(log: DecodedLog, calibration: Calibration) -> Reduction:
    assert calibration.verdict is Verdict.REFUSED
    return Reduction(
        calibration=calibration,
        wind=None,
        wind_by_loiter=(),
        loiters=(),
        airspeed=None,
        stall_margins=None,
        stall_margins_absent="There is no airspeed without a probe.",
        stall_warnings=(),
        faults=(),
        inputs=_inputs(log, None, None),
    )


def _inputs(log: DecodedLog, series: AirDataSeries | None, load_factor_source: str | None) -> Inputs:
    streams = {
        "probe": log.probe,
        "static": log.static,
        "temperature": log.temperature,
        "gps": log.gps,
        "attitude": log.attitude,
        "load_factor": log.load_factor,
    }
    times = [stream.time_s for stream in streams.values() if stream is not None and stream.time_s.size]
    duration_s = max(t[-1] for t in times) - min(t[0] for t in times) if times else 0.0
    return Inputs(
        format=log.format,
        start_utc=log.start_utc,
        duration_s=float(duration_s),
        samples={name: 0 if stream is None else int(stream.time_s.size) for name, stream in streams.items()},
        truncated=log.truncated,
        sha256=log.sha256,
        probe_source=series.probe_source if series else None,
        static_source=series.static_source if series else None,
        temperature_source=series.temperature_source if series else None,
        load_factor_source=load_factor_source,
        sensors=log.sensors,
    )

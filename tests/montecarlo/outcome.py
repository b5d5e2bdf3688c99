"""One simulated flight against its truth."""

import time
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind, Verdict
from service.domain.results import CorrectedSeries, Estimate, Reduction
from service.pipeline import reduce_flight
from tests.baselines import Baseline, circle_by_circle, textbook
from tests.montecarlo.gust_bound import speed_scale_bound
from tests.synthetic.families import FAMILIES
from tests.synthetic.truth import SimulatedFlight, Truth

CRASHED = "crashed"
MAY_REFUSE = ("large_zero_no_ground",)
"""A raw zero of any size at one airspeed: a wide interval is right there, and none as well."""
FAULTS_OF_ITS_OWN = {"spikes": FaultKind.SPIKES}
"""Faults that a family holds by its sensors, so that naming them is no false alarm."""

Spans = Sequence[tuple[float, float]]


@dataclass(frozen=True, slots=True)
class Compared:
    """An estimate's error, its standard uncertainty, and whether its 95 and 68 % intervals held the truth."""

    error: float
    deviation: float
    in_95: bool
    in_68: bool


@dataclass(frozen=True, slots=True)
class AirspeedCheck:
    """Corrected true airspeed over the used loiters. [m/s]

    The samples of one flight err alike, by their common scale and zero, so the shares of them that lie within their
    own uncertainty speak of one flight, not of as many trials as there are samples.
    """

    rms_mps: float
    share_in_95: float
    share_in_68: float
    mean_error_mps: float


@dataclass(frozen=True, slots=True)
class Answer:
    """What is known of a flight that was not refused. Scale figures are relative, of the speed scale."""

    scale: Compared
    north: Compared
    east: Compared
    airspeed: AirspeedCheck | None
    """None where no sample of the loiters has an uncertainty."""
    bound: float
    by_circle: Baseline
    by_textbook: Baseline


@dataclass(frozen=True, slots=True)
class Outcome:
    """`answer` is None when refused or crashed; `seconds` is the time of the reduction."""

    verdict: str
    reasons: tuple[str, ...]
    false_alarms: tuple[str, ...]
    seconds: float
    answer: Answer | None


def outcome_of(flight: SimulatedFlight) -> Outcome:
    """Reduce a flight and judge the answer; a crash is an outcome too, lest it end a campaign of hours."""
    started = time.perf_counter()
    try:
        reduction = reduce_flight(flight.log, flight.settings)
    except Exception as crash:
        return Outcome(CRASHED, (f"{flight.index}: {crash!r}",), (), time.perf_counter() - started, None)
    return judge(flight, reduction, time.perf_counter() - started)


def judge(flight: SimulatedFlight, reduction: Reduction, seconds: float = 0.0) -> Outcome:
    """Compare an answer with the truth."""
    right = {fault.fault for fault in flight.faults} | {FAULTS_OF_ITS_OWN.get(flight.family)}
    return Outcome(
        verdict=str(reduction.calibration.verdict),
        reasons=tuple(str(reason.code) for reason in reduction.calibration.reasons),
        false_alarms=tuple(sorted({str(fault.fault) for fault in reduction.faults if fault.fault not in right})),
        seconds=seconds,
        answer=_answer(flight, reduction),
    )


def holds_an_answer(family: str) -> bool:
    """Whether a refusal of one of its flights is a miss."""
    return not FAMILIES[family].refused and family not in MAY_REFUSE


def _answer(flight: SimulatedFlight, reduction: Reduction) -> Answer | None:
    scale, wind = reduction.calibration.speed_scale, reduction.wind
    if reduction.calibration.verdict is Verdict.REFUSED or scale is None or wind is None or reduction.airspeed is None:
        return None
    truth = flight.truth
    spans = [(loiter.start_s, loiter.end_s) for loiter in reduction.loiters if loiter.used]
    north, east = truth.mean_air_velocity(spans)
    return Answer(
        scale=_compared(scale, truth.speed_scale, unit=truth.speed_scale),
        north=_compared(wind.north_mps, north),
        east=_compared(wind.east_mps, east),
        airspeed=_airspeed_check(truth, reduction.airspeed, spans),
        bound=speed_scale_bound(flight, spans),
        by_circle=circle_by_circle(flight, reduction),
        by_textbook=textbook(flight, reduction),
    )


def _compared(estimate: Estimate, truth: float, unit: float = 1.0) -> Compared:
    low, high = estimate.interval_95
    error = estimate.value - truth
    return Compared(
        error / unit,
        estimate.standard_uncertainty / unit,
        low <= truth <= high,
        abs(error) <= estimate.standard_uncertainty,
    )


def _airspeed_check(truth: Truth, series: CorrectedSeries, spans: Spans) -> AirspeedCheck | None:
    inside = _within(series.time_s, spans) & np.isfinite(series.true_standard_uncertainty_mps)
    if not inside.any():
        return None
    time_s, stated = series.time_s[inside], series.true_standard_uncertainty_mps[inside]
    off = series.true_mps[inside] - np.interp(time_s, truth.probe_time_s, truth.probe_true_airspeed_mps)
    return AirspeedCheck(
        rms_mps=float(np.sqrt(np.mean(off**2))),
        share_in_95=float(np.mean(np.abs(off) <= 1.96 * stated)),
        share_in_68=float(np.mean(np.abs(off) <= stated)),
        mean_error_mps=float(off.mean()),
    )


def _within(time_s: FloatArray, spans: Spans) -> BoolArray:
    inside = np.zeros(time_s.size, dtype=np.bool_)
    for start_s, end_s in spans:
        inside |= (time_s >= start_s) & (time_s <= end_s)
    return inside

"""Campaign over the families of simulated flights: is the stated uncertainty true?

    python -m tests.montecarlo --flights 40            every family
    python -m tests.montecarlo --flights 1000 light    one family, for the record

Prints, by family: root mean square error and bias of the speed scale, the mean standard uncertainty, how often the 68
and 95 % intervals hold the truth, the same for the wind averaged over the used loiters and for the true airspeed,
verdicts, false alarms; beside it root mean square error and 95 % coverage of one fit per circle (Student) and of
textbook least squares.
"""

import argparse
import os
import sys
import time
from collections import Counter
from collections.abc import Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass

import numpy as np
from threadpoolctl import threadpool_limits

from service.domain.results import Estimate, Reduction
from service.pipeline import reduce_flight
from tests.baselines import NO_ANSWER, Baseline, circle_by_circle, textbook
from tests.synthetic.families import FAMILIES, simulate_each
from tests.synthetic.truth import SimulatedFlight

CHUNK = 50


@dataclass(frozen=True, slots=True)
class Outcome:
    """One flight: errors in units of the quantity, and whether the intervals held the truth."""

    verdict: str
    scale_error: float
    scale_deviation: float
    scale_in_95: bool
    scale_in_68: bool
    wind_error: tuple[float, float]
    wind_deviation: tuple[float, float]
    wind_in_95: tuple[bool, bool]
    true_airspeed_rms: float
    true_airspeed_in_95: float
    false_alarms: tuple[str, ...]
    reasons: tuple[str, ...]
    half_width: float
    by_circle: Baseline
    by_textbook: Baseline


def judge(flight: SimulatedFlight, reduction: Reduction) -> Outcome:
    """Compare an answer with the truth. Scale errors are relative, of the speed scale."""
    calibration = reduction.calibration
    truth = flight.truth
    injected = {fault.fault for fault in flight.faults}
    alarms = tuple(str(fault.fault) for fault in reduction.faults if fault.fault not in injected)
    reasons = tuple(str(reason.code) for reason in calibration.reasons)
    if calibration.speed_scale is None or reduction.wind is None or reduction.airspeed is None:
        nothing = (float("nan"), float("nan"))
        unanswered = (*nothing, False, False, nothing, nothing, (False, False), *nothing)
        return Outcome("refused", *unanswered, alarms, reasons, 0.0, NO_ANSWER, NO_ANSWER)
    scale = calibration.speed_scale
    spans = [(loiter.start_s, loiter.end_s) for loiter in reduction.loiters if loiter.used]
    wind = truth.mean_air_velocity(spans)
    estimates = (reduction.wind.north_mps, reduction.wind.east_mps)
    series = reduction.airspeed
    true_airspeed = np.interp(series.time_s, truth.probe_time_s, truth.probe_true_airspeed_mps)
    inside = np.zeros(series.time_s.size, dtype=bool)
    for start, end in spans:
        inside |= (series.time_s >= start) & (series.time_s <= end)
    inside &= np.isfinite(series.true_standard_uncertainty_mps)
    off = (series.true_mps - true_airspeed)[inside]
    return Outcome(
        verdict=str(calibration.verdict),
        scale_error=scale.value / truth.speed_scale - 1,
        scale_deviation=scale.standard_uncertainty / scale.value,
        scale_in_95=_holds(scale, truth.speed_scale),
        scale_in_68=abs(scale.value - truth.speed_scale) <= scale.standard_uncertainty,
        wind_error=(estimates[0].value - wind[0], estimates[1].value - wind[1]),
        wind_deviation=(estimates[0].standard_uncertainty, estimates[1].standard_uncertainty),
        wind_in_95=(_holds(estimates[0], wind[0]), _holds(estimates[1], wind[1])),
        true_airspeed_rms=float(np.sqrt(np.mean(off**2))),
        true_airspeed_in_95=float(np.mean(np.abs(off) <= 1.96 * series.true_standard_uncertainty_mps[inside])),
        false_alarms=alarms,
        reasons=reasons,
        half_width=(scale.interval_95[1] - scale.interval_95[0]) / 2,
        by_circle=circle_by_circle(flight, reduction),
        by_textbook=textbook(flight, reduction),
    )


def _holds(estimate: Estimate, truth: float) -> bool:
    return estimate.interval_95[0] <= truth <= estimate.interval_95[1]


def run(family: str, first: int, count: int, seed: int) -> list[Outcome]:
    """Outcomes of `count` flights of a family, beginning with index `first`."""
    flights = simulate_each(family, count, seed, first=first)
    return [judge(flight, reduce_flight(flight.log, flight.settings)) for flight in flights]


HEADER = (
    f"{'family':26s} {'n':>5s} {'acc':>4s} {'dbt':>4s} {'ref':>4s} | "
    f"{'rms %':>6s} {'bias %':>7s} {'sd %':>6s} {'95%':>4s} {'68%':>4s} | "
    f"{'wind rms':>8s} {'sd':>6s} {'95%':>4s} {'68%':>4s} | {'TAS rms':>7s} {'95%':>4s} | "
    f"{'circle':>6s} {'95%':>4s} {'textb.':>6s} {'95%':>4s} | alarms"
)


def line(family: str, outcomes: Iterable[Outcome]) -> str:
    """One row of the table."""
    rows = list(outcomes)
    answered = [row for row in rows if row.verdict != "refused"]
    counts = Counter(row.verdict for row in rows)
    alarmed = sum(bool(row.false_alarms) for row in rows)
    kinds = Counter(kind for row in rows for kind in set(row.false_alarms))
    head = f"{family:26s} {len(rows):5d} {counts['accepted']:4d} {counts['doubtful']:4d} {counts['refused']:4d} | "
    tail = f"{alarmed} {dict(kinds) or ''}"
    if not answered:
        return head + tail + f" {dict(Counter(r for row in rows for r in row.reasons[:1]))}"
    error = np.array([row.scale_error for row in answered])
    wind = np.array([row.wind_error for row in answered])
    deviation = np.array([row.wind_deviation for row in answered])
    return head + (
        f"{100 * _rms(error):6.3f} {100 * error.mean():+7.3f} "
        f"{100 * np.mean([row.scale_deviation for row in answered]):6.3f} "
        f"{100 * np.mean([row.scale_in_95 for row in answered]):4.0f} "
        f"{100 * np.mean([row.scale_in_68 for row in answered]):4.0f} | "
        f"{_rms(wind):8.3f} {deviation.mean():6.3f} {100 * np.mean([row.wind_in_95 for row in answered]):4.0f} "
        f"{100 * np.mean(np.abs(wind) <= deviation):4.0f} | "
        f"{np.sqrt(np.mean([row.true_airspeed_rms**2 for row in answered])):7.3f} "
        f"{100 * np.mean([row.true_airspeed_in_95 for row in answered]):4.0f} | "
        f"{_baseline([row.by_circle for row in answered])} {_baseline([row.by_textbook for row in answered])} | {tail}"
    )


def _baseline(rows: list[Baseline]) -> str:
    error = np.array([row.error for row in rows])
    reach = np.array([row.half_width for row in rows])
    known = np.isfinite(error)
    if not known.any():
        return f"{'-':>6s} {'-':>4s}"
    held = np.abs(error[known]) <= reach[known]
    return f"{100 * _rms(error[known]):6.3f} {100 * held.mean():4.0f}"


def _rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values**2)))


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("families", nargs="*", help="default: all")
    parser.add_argument("--flights", type=int, default=40)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--processes", type=int, default=os.cpu_count() or 1)
    options = parser.parse_args(arguments)
    families = options.families or list(FAMILIES)
    print(HEADER)
    with ProcessPoolExecutor(options.processes, initializer=threadpool_limits, initargs=(1,)) as pool:
        for family in families:
            started = time.perf_counter()
            starts = range(0, options.flights, CHUNK)
            parts = [
                pool.submit(run, family, first, min(CHUNK, options.flights - first), options.seed) for first in starts
            ]
            outcomes = [outcome for part in parts for outcome in part.result()]
            spent = (time.perf_counter() - started) / len(outcomes)
            print(f"{line(family, outcomes)}  ({spent:.2f} s a flight)", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())

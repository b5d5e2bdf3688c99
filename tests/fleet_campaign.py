"""Campaign over simulated fleets: do the pooled intervals hold, and how often do the change tests speak?

    python -m tests.fleet_campaign --fleets 2000     the whole table
    python -m tests.fleet_campaign --fleets 200 --flights 3 10

A fleet is one probe: n flights at irregular dates, each with an uncertainty u from 0.2 to 0.9 %, whose ln scales
scatter about the truth by u and by tau from flight to flight; then one flight more. All goes through
`service.fleet.assess`.

First table, by n and tau: in how many per cent of fleets the pooled 95 % interval of n flights held the truth, and its
mean half width; the same of the interval for the next flight and that flight's reading; of the interval of tau; in how
many fleets a flight was wrongly set apart. Then the same fleets with one flight, any of them, 4 % off: in how many it
was set apart, and how often the pooled interval still held the truth.

Second table, of n flights and the one more, which is the newest: false alarms of the test of the newest flight, of the
drift test, and how often either or a flight apart made the recommendation "check the probe"; then what is found: a
step of the newest flight by 2 and by 4 %, a drift of 1 % in 10 flights. `-` where too few flights tell nothing.

Marks: `<` and `>` behind a coverage outside 92 to 98 %, `>` behind a false alarm of one test, or a wrong setting apart,
above 1 %, and behind `check`, which joins the three, above 3 %; all by more than chance: outside the binomial limits of
that end at 5 % over all figures (Bonferroni). One and two flights have no aim: tau is then assumed, or known by little
more than its prior, and the intervals hold more.
"""

import argparse
import os
import time
from collections.abc import Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, fields, replace
from datetime import UTC, datetime, timedelta

import numpy as np
from scipy import stats

from service.fleet.assess import assess
from service.fleet.records import Assessment, FlightFactor, Recommendation
from tests.montecarlo.limits import Coverage, Limits

FLIGHTS = (1, 2, 3, 5, 10, 30)
DEVIATIONS = (0.0, 0.005, 0.01, 0.015)
"""tau, between flights."""
UNCERTAINTIES = (0.002, 0.009)
LOG_SCALE = -0.06
STEPS = (0.02, 0.04)
BAD_FLIGHT = 0.04
DRIFT_PER_FLIGHT = 0.001
MEAN_DAYS_APART = 5.0
FIRST_DAY = datetime(2026, 1, 5, 9, tzinfo=UTC)
FEWEST_WITH_AIM = 3
ALARM_AIM, CHECK_AIM = 0.01, 0.03
FALSE_MARKS = 0.05


@dataclass(frozen=True, slots=True)
class Outcome:
    """Of one fleet, or means over fleets of one cell; NaN where so few flights tell nothing."""

    pooled_holds: float
    pooled_half_width: float
    next_holds: float
    next_half_width: float
    deviation_holds: float
    apart: float
    """A sound flight was left out."""
    bad_apart: float
    bad_holds: float
    newest_alarm: float
    drift_alarm: float
    checks: float
    small_step: float
    large_step: float
    drift_found: float


@dataclass(frozen=True, slots=True)
class Cell:
    flights: int
    deviation: float
    fleets: int
    mean: Outcome


# --- fleets -----------------------------------------------------------------------------------------------------------


def simulate(flights: int, deviation: float, rng: np.random.Generator) -> list[FlightFactor]:
    """Flights of one sound probe, in order."""
    uncertainty = rng.uniform(*UNCERTAINTIES, flights)
    log_scale = LOG_SCALE + rng.normal(0.0, np.hypot(uncertainty, deviation))
    days = np.cumsum(rng.exponential(MEAN_DAYS_APART, flights))
    return [
        FlightFactor(f"flight {number + 1}", FIRST_DAY + timedelta(days=float(day)), float(x), float(u))
        for number, (day, x, u) in enumerate(zip(days, log_scale, uncertainty, strict=True))
    ]


def off_by(fleet: list[FlightFactor], amounts: Iterable[float]) -> list[FlightFactor]:
    """The same flights, each ln scale off by its amount."""
    return [
        replace(flight, log_scale=flight.log_scale + float(amount))
        for flight, amount in zip(fleet, amounts, strict=True)
    ]


def judge(fleet: list[FlightFactor], deviation: float, rng: np.random.Generator) -> Outcome:
    """All but the last flight are pooled; the last is the next one, then the newest."""
    count = len(fleet) - 1
    sound, later = assess(fleet[:-1]), assess(fleet)
    assert sound.pool is not None
    bad = int(rng.integers(count))
    with_bad = assess(off_by(fleet[:-1], BAD_FLIGHT * (np.arange(count) == bad)))
    assert with_bad.pool is not None
    newest = np.arange(count + 1) == count
    small, large = (assess(off_by(fleet, step * newest)) for step in STEPS)
    drifting = assess(off_by(fleet, DRIFT_PER_FLIGHT * np.arange(count + 1)))
    next_low, next_high = np.log(sound.pool.next_flight.interval_95)
    between = sound.pool.between_flights
    return Outcome(
        pooled_holds=holds_truth(sound),
        pooled_half_width=half_width(sound.pool.speed_scale.interval_95),
        next_holds=float(next_low <= fleet[-1].log_scale <= next_high),
        next_half_width=half_width(sound.pool.next_flight.interval_95),
        deviation_holds=np.nan
        if between is None
        else float(between.interval_95[0] <= deviation <= between.interval_95[1]),
        apart=float(any(share.apart for share in sound.pool.flights)),
        bad_apart=told(count, with_bad.pool.flights[bad].apart),
        bad_holds=told(count, bool(holds_truth(with_bad))),
        newest_alarm=told(count, later.newest.disagrees),
        drift_alarm=told(count, later.drift.drifts),
        checks=told(count, later.advice.recommendation is Recommendation.CHECK_PROBE),
        small_step=told(count, small.newest.disagrees),
        large_step=told(count, large.newest.disagrees),
        drift_found=told(count, drifting.drift.drifts),
    )


def holds_truth(assessment: Assessment) -> float:
    assert assessment.pool is not None
    low, high = assessment.pool.speed_scale.interval_95
    return float(low <= np.exp(LOG_SCALE) <= high)


def half_width(interval: tuple[float, float]) -> float:
    """In ln scale."""
    return float(np.log(interval[1] / interval[0])) / 2


def told(flights: int, alarm: bool) -> float:
    return float(alarm) if flights >= FEWEST_WITH_AIM else np.nan


def run_cell(flights: int, deviation: float, fleets: int, seed: int) -> Cell:
    """Means over so many fleets; the same for the same arguments."""
    rng = np.random.default_rng([seed, flights, round(1e6 * deviation)])
    outcomes = [judge(simulate(flights + 1, deviation, rng), deviation, rng) for _ in range(fleets)]
    mean = {field.name: float(np.mean([getattr(one, field.name) for one in outcomes])) for field in fields(Outcome)}
    return Cell(flights, deviation, fleets, Outcome(**mean))


# --- tables -----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Marks:
    figures: int
    """In all tables."""

    def coverage(self, cell: Cell, share: float) -> str:
        if cell.flights < FEWEST_WITH_AIM:
            return " "
        return Limits(self.figures).mark(Coverage(95, share, cell.fleets))

    def alarm(self, cell: Cell, share: float, aim: float) -> str:
        most = stats.binom.isf(FALSE_MARKS / self.figures, cell.fleets, aim)
        return ">" if share * cell.fleets > most + 1e-9 else " "


def first_row(cell: Cell, marks: Marks) -> str:
    mean = cell.mean
    return " ".join(
        [
            f"{cell.flights:7d} {100 * cell.deviation:5.1f} ",
            f"{percent(mean.pooled_holds)}{marks.coverage(cell, mean.pooled_holds)}",
            f"{100 * mean.pooled_half_width:5.2f}  ",
            f"{percent(mean.next_holds)}{marks.coverage(cell, mean.next_holds)}",
            f"{100 * mean.next_half_width:5.2f}  ",
            f"{percent(mean.deviation_holds)} ",
            f"{percent(mean.apart)}{marks.alarm(cell, mean.apart, ALARM_AIM)} ",
            f"{percent(mean.bad_apart)}    {percent(mean.bad_holds)}",
        ]
    )


def second_row(cell: Cell, marks: Marks) -> str:
    mean = cell.mean
    return " ".join(
        [
            f"{cell.flights:5d} + 1 {100 * cell.deviation:5.1f} ",
            f"{percent(mean.newest_alarm)}{marks.alarm(cell, mean.newest_alarm, ALARM_AIM)}",
            f"{percent(mean.drift_alarm)}{marks.alarm(cell, mean.drift_alarm, ALARM_AIM)}",
            f"{percent(mean.checks)}{marks.alarm(cell, mean.checks, CHECK_AIM)}",
            f" {percent(mean.small_step)} {percent(mean.large_step)} {percent(mean.drift_found)}",
        ]
    )


FIRST_TITLES = "flights tau/%  pooled  +-/%     next   +-/%     tau   apart  4 % off: apart  held"
SECOND_TITLES = "flights tau/%  newest  drift  check   2 %   4 %  1 %/10   (false alarms | found)"


def percent(share: float) -> str:
    return "    -" if np.isnan(share) else f"{100 * share:5.1f}"


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(
        prog="python -m tests.fleet_campaign",
        description=__doc__,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--fleets", type=int, default=200, help="of each number of flights and tau (default 200)")
    parser.add_argument("--flights", type=int, nargs="+", default=FLIGHTS, help="numbers of flights")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--processes", type=int, default=os.cpu_count() or 1)
    options = parser.parse_args(arguments)
    if min(*options.flights, options.fleets, options.processes) < 1:
        parser.error("at least one flight, one fleet and one process")
    started = time.perf_counter()
    tasks = [(n, deviation, options.fleets, options.seed) for n in options.flights for deviation in DEVIATIONS]
    # six figures of a cell are marked
    marks = Marks(6 * len(tasks))
    print(f"{options.fleets} fleets of each, seed {options.seed}")
    print(FIRST_TITLES, flush=True)
    cells: list[Cell] = []
    with ProcessPoolExecutor(options.processes) as executor:
        for cell in executor.map(run_cell, *zip(*tasks, strict=True)):
            cells.append(cell)
            print(first_row(cell, marks), flush=True)
    print()
    print(SECOND_TITLES, *(second_row(cell, marks) for cell in cells), sep="\n")
    print(f"\n{time.perf_counter() - started:.0f} s")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())

"""Campaign over the families of simulated flights: is the stated uncertainty true, and how small is it?

    python -m tests.montecarlo --flights 40            every family
    python -m tests.montecarlo --flights 1000 light    one family, for the record
    python -m tests.montecarlo --quick                 a few flights of every family, always the same

First table, by family: flights, and how many were accepted, doubtful, refused. Of the speed scale: root mean square
error; its Cramer-Rao bound under the true gust covariance (tests/montecarlo/gust_bound.py; root mean square over the
flights) and the ratio of both; bias, and its share of the root mean square error; the mean standard uncertainty stated;
in how many per cent of flights the 95 and 68 % intervals (68: value and standard uncertainty) held the truth, and in
how many of the accepted ones. Beside it one fit per circle with Student's interval, the paired ratio of root mean
square errors (service over circles, same flights) with its bootstrap standard error, and textbook least squares.

Second table: the wind averaged over the used loiters, its components apart and together. The true airspeed of the
samples in them, and the mean over the flights of the share of samples that lie within their own uncertainty: samples of
a flight err alike, so this is a coverage of as many trials as there are flights, at best. The error of the mean
airspeed of each, in which the sensor's noise averages out. False alarms, seconds of a reduction.

A flight that holds an answer and is refused counts as a miss in every coverage, and is called out.

Marks: `<` and `>` behind a coverage that is outside 92 to 98 % (95 % interval) or 62 to 74 % (68 % interval) by more
than chance: outside the two-sided binomial limits of that band's ends at 5 % / m, m being all coverages of all families
(Bonferroni). `!` behind a ratio above 1.03 (0.8 in light and moderate gusts), or a bias above a quarter of the root
mean square error, by more than chance. No mark does not mean met: with few flights chance is wide.

Last, two worked sets of known scale and wind, and a recorded flight of three circles where its log is at hand.
"""

import argparse
import os
import sys
import time

from tests.montecarlo.campaign import run_campaign
from tests.montecarlo.limits import Limits
from tests.montecarlo.outcome import CRASHED
from tests.montecarlo.recorded_flight import recorded_flight_rows
from tests.montecarlo.summary import COVERAGES, FamilySummary, summarise
from tests.montecarlo.table import other_row, other_titles, scale_row, scale_titles, totals
from tests.montecarlo.worked_sets import worked_set_rows
from tests.synthetic.families import FAMILIES

QUICK_FLIGHTS = 4


def _options(arguments: list[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(
        prog="python -m tests.montecarlo",
        description=__doc__,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("families", nargs="*", help="default: all", metavar="family")
    parser.add_argument("--flights", type=int, default=40, help="of each family (default 40)")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--processes", type=int, default=os.cpu_count() or 1)
    parser.add_argument("--quick", action="store_true", help=f"{QUICK_FLIGHTS} flights of each family, seed 1")
    options = parser.parse_args(arguments)
    unknown = [family for family in options.families if family not in FAMILIES]
    if unknown or options.flights < 1 or options.processes < 1:
        parser.error(f"no such family: {', '.join(unknown)}" if unknown else "at least one flight and one process")
    if options.quick:
        options.flights, options.seed = QUICK_FLIGHTS, 1
    options.families = list(dict.fromkeys(options.families)) or list(FAMILIES)
    return options


def main(arguments: list[str] | None = None) -> int:
    """Print the tables; 1 when a reduction crashed."""
    options = _options(arguments)
    started = time.perf_counter()
    limits = Limits(COVERAGES * max(sum(not FAMILIES[family].refused for family in options.families), 1))
    summaries: list[FamilySummary] = []
    print(scale_titles(), flush=True)
    try:
        for family, outcomes in run_campaign(options.families, options.flights, options.seed, options.processes):
            summaries.append(summarise(family, outcomes))
            print(scale_row(summaries[-1], limits), flush=True)
    finally:
        # an interrupted campaign still shows all it has
        spent = time.perf_counter() - started
        print("\n" + "\n".join([other_titles(), *(other_row(summary, limits) for summary in summaries)]))
        print("\n" + "\n".join(totals(summaries)))
        flights = sum(summary.flights for summary in summaries)
        print(f"{spent:.0f} s, {spent / max(flights, 1):.2f} s a flight with simulation and bound", flush=True)
    print("\n" + "\n".join([*worked_set_rows(), *recorded_flight_rows()]))
    return int(any(summary.verdicts[CRASHED] for summary in summaries))


if __name__ == "__main__":
    sys.exit(main())

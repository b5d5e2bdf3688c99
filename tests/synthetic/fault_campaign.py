"""Campaign over the faults: is each kind found, does the rest still give the scale, are sound flights left alone?

    python -m tests.synthetic.fault_campaign                   100 flights a kind, 500 sound ones, for the record
    python -m tests.synthetic.fault_campaign --flights 30 --clean 0 --kinds leak
    python -m tests.synthetic.fault_campaign --before-fit      without the fit, so without leaks: much quicker

Flights are dealt evenly over the good families. Each is reduced once as it is; the first of them also with one fault of
each kind at a random time in the air, and with those that make a flight worthless from start to end. Prints, by kind:
how many were found; how many of their spans are right to 3 s at both ends, and to one window of the check; how many
were refused; of the others, how many 95 % intervals of the scale held the truth, and the root mean square of the
scale's error in standard uncertainties. Then every miss; then, by family, the false alarms in sound flights.

A leak is a step of the scale in mid-flight, of no size laid down: `tests.synthetic.faults` takes 7 to 20 % of the
pressure away, 3.6 to 10.6 % of the speed. In moderate air (gusts of 0.9 m/s, 5 % of the speed) an edge, and the level
of half a flight, are known to some 1.1 % of the speed: there steps below 5 % do not stand out.
"""

import argparse
import os
import sys
import time
import zlib
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass

import numpy as np
from threadpoolctl import threadpool_limits

from service.domain.codes import FaultKind
from service.domain.results import Calibration, Fault
from service.pipeline import reduce_flight
from service.reduction.faults import find_faults
from service.reduction.phases import find_ground_phases
from service.reduction.series import build_series
from tests.synthetic.families import FAMILIES, simulate_each
from tests.synthetic.faults import INJECTORS, random_fault, whole_flight
from tests.synthetic.truth import SimulatedFlight

ALREADY_FAULTY = ("spikes",)
"""Good families with a fault of their own."""
WORTHLESS = (FaultKind.FROZEN, FaultKind.BLOCKED, FaultKind.SWAPPED)
"""Kinds that are also laid over the whole flight."""
SOUND = "none"
"""The row of flights without a fault."""
SPAN_S = 3.0
WINDOW_S = 30.0
"""Of the checks that look through windows, and about one turn, which the level of a leak needs."""
CHUNK = 5
"""Flights that one process takes at once."""


@dataclass(frozen=True, slots=True)
class Outcome:
    """What was told of one flight. `row` is the kind of its fault, or `SOUND`."""

    row: str
    family: str
    index: int
    span_s: tuple[float, float]
    """Of the fault, as far as samples can tell it; NaN for a sound flight."""
    found: bool
    off_s: float
    """The larger error of the two ends; NaN where the fault was not found."""
    others: tuple[str, ...]
    """Kinds that were told and are not there."""
    refused: bool
    scale_z: float
    """Error of the speed scale in standard uncertainties; NaN where there is none."""
    scale_held: bool
    """Whether the 95 % interval holds the truth."""
    seconds: float
    """That the reduction took."""


def judge(sound: SimulatedFlight, looked_at: SimulatedFlight, row: str, *, fit: bool = True) -> Outcome:
    """Reduce a flight, with a fault or without, and compare what is told with the truth."""
    started = time.perf_counter()
    reduction = reduce_flight(looked_at.log, looked_at.settings) if fit else None
    faults = reduction.faults if reduction else faults_before_fit(looked_at)
    seconds = time.perf_counter() - started
    span_s, off_s = (np.nan, np.nan), np.nan
    if looked_at.faults:
        span_s = told_span(sound, looked_at)
        off_s = span_error(sound, looked_at, span_s, faults)
    there = {fault.fault for fault in looked_at.faults}
    scale_z, held = _scale(looked_at, reduction.calibration if reduction else None)
    return Outcome(
        row=row,
        family=looked_at.family,
        index=looked_at.index,
        span_s=span_s,
        found=bool(np.isfinite(off_s)),
        off_s=off_s,
        others=tuple(sorted({str(fault.fault) for fault in faults if fault.fault not in there})),
        refused=not np.isfinite(scale_z),
        scale_z=scale_z,
        scale_held=held,
        seconds=seconds,
    )


def told_span(sound: SimulatedFlight, broken: SimulatedFlight) -> tuple[float, float]:
    """The true fault's span, cut to what the samples can tell: those that it changed, in flight. [s]"""
    (truth,) = broken.faults
    before, after = sound.log.probe, broken.log.probe
    assert before is not None
    assert after is not None
    if truth.fault in (FaultKind.DROPOUT, FaultKind.FROZEN_STATIC, FaultKind.DEAD):
        return truth.start_s, truth.end_s
    first_s, last_s = _flown_s(sound)
    changed = before.time_s[before.impact_pressure_pa != after.impact_pressure_pa]
    return max(float(changed[0]), first_s), min(float(changed[-1]), last_s)


def span_error(
    sound: SimulatedFlight, broken: SimulatedFlight, span_s: tuple[float, float], faults: Iterable[Fault]
) -> float:
    """The larger error of the two ends; NaN where no fault of the kind was told near the true span. [s]"""
    kind, (start_s, end_s) = broken.faults[0].fault, span_s
    same = [f for f in faults if f.fault == kind and f.start_s <= end_s + SPAN_S and f.end_s >= start_s - SPAN_S]
    if not same:
        return float("nan")
    first_s, last_s = (start_s, end_s) if kind is FaultKind.DEAD else _flown_s(sound)
    off_start = max(min(f.start_s for f in same), first_s) - start_s
    off_end = min(max(f.end_s for f in same), last_s) - end_s
    return max(abs(off_start), abs(off_end))


def _flown_s(flight: SimulatedFlight) -> tuple[float, float]:
    """Lift-off and touch-down, or the ends of the log. [s]"""
    flown = flight.truth.time_s[~flight.truth.on_ground]
    return float(flown[0]), float(flown[-1])


def _scale(flight: SimulatedFlight, calibration: Calibration | None) -> tuple[float, bool]:
    scale = calibration.speed_scale if calibration else None
    if scale is None:
        return float("nan"), False
    truth = flight.truth.speed_scale
    return (scale.value - truth) / scale.standard_uncertainty, scale.interval_95[0] <= truth <= scale.interval_95[1]


def faults_before_fit(flight: SimulatedFlight) -> tuple[Fault, ...]:
    """What the reduction reports before it fits."""
    log = flight.log
    assert log.probe is not None
    phases = find_ground_phases(log)
    series = build_series(log, log.probe, phases.ground_s, phases.rest_s)
    full_scale_pa = flight.settings.probe.full_scale_pa
    return find_faults(
        series, log_gaps=log.gaps, sensors=log.sensors, full_scale_pa=full_scale_pa, static=log.static
    ).faults


def with_faults(
    flight: SimulatedFlight, kinds: Iterable[FaultKind], seed: int
) -> Iterator[tuple[str, SimulatedFlight]]:
    """The flight with each kind at a random time, and with the worthless kinds throughout; by the name of the row."""
    for kind in kinds:
        place = [seed, zlib.crc32(flight.family.encode()), flight.index, zlib.crc32(str(kind).encode())]
        rng = np.random.default_rng(place)
        broken = random_fault(flight, kind, rng)
        if _changes_anything(flight, broken):
            yield str(kind), broken
        if kind in WORTHLESS:
            yield f"{kind} throughout", INJECTORS[kind](flight, whole_flight(flight), rng)


def _changes_anything(sound: SimulatedFlight, broken: SimulatedFlight) -> bool:
    """Spikes at random may have hit no sample of a slow sensor."""
    if broken.faults[0].fault is not FaultKind.SPIKES:
        return True
    assert sound.log.probe is not None
    assert broken.log.probe is not None
    return bool(np.any(sound.log.probe.impact_pressure_pa != broken.log.probe.impact_pressure_pa))


# --- the campaign -----------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Task:
    """Some flights of a family: those before `sound` are reduced as they are, those before `broken` with faults."""

    family: str
    first: int
    stop: int
    sound: int
    broken: int
    kinds: tuple[FaultKind, ...]
    seed: int
    fit: bool


def good_families() -> tuple[str, ...]:
    """Families that hold a calibration and no fault."""
    return tuple(name for name, family in FAMILIES.items() if not family.refused and name not in ALREADY_FAULTY)


def tasks(
    families: Sequence[str], broken: int, sound: int, kinds: Iterable[FaultKind], seed: int, *, fit: bool = True
) -> list[Task]:
    """All flights, dealt evenly over the families: `broken` of them with each kind of fault, `sound` without one."""
    wanted = tuple(kind for kind in kinds if fit or kind is not FaultKind.LEAK)
    dealt = []
    for place, family in enumerate(families):
        with_fault, without = ((n + len(families) - 1 - place) // len(families) for n in (broken, sound))
        total = max(with_fault, without)
        for first in range(0, total, CHUNK):
            stop = min(first + CHUNK, total)
            dealt.append(Task(family, first, stop, without, with_fault, wanted, seed, fit))
    return dealt


def run(task: Task) -> list[Outcome]:
    """Simulate and judge the flights of a task."""
    outcomes = []
    for flight in simulate_each(task.family, task.stop - task.first, task.seed, first=task.first):
        if flight.index < task.sound:
            outcomes.append(judge(flight, flight, SOUND, fit=task.fit))
        if flight.index < task.broken:
            broken = with_faults(flight, task.kinds, task.seed)
            outcomes += [judge(flight, looked_at, row, fit=task.fit) for row, looked_at in broken]
    return outcomes


def campaign(dealt: Sequence[Task], processes: int) -> list[Outcome]:
    """Outcomes of all tasks, in their order."""
    if processes == 1:
        return [outcome for task in dealt for outcome in run(task)]
    with ProcessPoolExecutor(processes, initializer=threadpool_limits, initargs=(1,)) as pool:
        return [outcome for outcomes in pool.map(run, dealt) for outcome in outcomes]


# --- tables -----------------------------------------------------------------------------------------------------------

FAULT_HEADER = (
    f"{'fault':20s} {'flights':>7s} {'found %':>7s} {'3 s %':>6s} {'window %':>8s} {'refused':>7s} "
    f"{'scale held %':>12s} {'z rms':>6s} {'s':>6s}  also told"
)


def fault_row(name: str, outcomes: Sequence[Outcome]) -> str:
    """One line of the table of kinds."""
    answered = [o for o in outcomes if not o.refused]
    found, close, window = (
        100.0 * sum(marks) / len(outcomes)
        for marks in (
            [o.found for o in outcomes],
            [o.off_s <= SPAN_S for o in outcomes],
            [o.off_s <= WINDOW_S for o in outcomes],
        )
    )
    others = Counter(kind for o in outcomes for kind in o.others)
    return (
        f"{name:20s} {len(outcomes):7d} {_unless_sound(name, f'{found:.1f}'):>7s} "
        f"{_unless_sound(name, f'{close:.1f}'):>6s} {_unless_sound(name, f'{window:.1f}'):>8s} "
        f"{len(outcomes) - len(answered):7d} {_held(answered):>12s} {_spread(answered):>6s} "
        f"{sum(o.seconds for o in outcomes):6.0f}  {dict(others) or ''}"
    )


def _unless_sound(name: str, figure: str) -> str:
    return "-" if name == SOUND else figure


def _held(answered: Sequence[Outcome]) -> str:
    return f"{100.0 * sum(o.scale_held for o in answered) / len(answered):.1f}" if answered else "-"


def _spread(answered: Sequence[Outcome]) -> str:
    return f"{np.sqrt(np.mean([o.scale_z**2 for o in answered])):.2f}" if answered else "-"


def miss_row(outcome: Outcome) -> str:
    """One line for a fault that was missed, or whose span is off."""
    how = f"span off by {outcome.off_s:.1f} s" if outcome.found else "missed"
    start_s, end_s = outcome.span_s
    also = f", told {', '.join(outcome.others)}" if outcome.others else ""
    return (
        f"  {outcome.row:20s} {outcome.family} {outcome.index}: {start_s:.1f} to {end_s:.1f} s, {how}{also}, "
        f"z {outcome.scale_z:+.1f}"
    )


def alarm_row(family: str, outcomes: Sequence[Outcome]) -> str:
    """One line of the table of sound flights."""
    alarmed = sum(bool(o.others) for o in outcomes)
    kinds = Counter(kind for o in outcomes for kind in o.others)
    which = sorted(o.index for o in outcomes if o.others)
    return (
        f"{family:26s} {len(outcomes):7d} {alarmed:7d} {100.0 * alarmed / len(outcomes):6.2f} "
        f"{sum(o.seconds for o in outcomes):6.0f}  {dict(kinds) or ''} {which if family != 'all' and which else ''}"
    ).rstrip()


def print_refusals(rows: dict[str, list[Outcome]]) -> None:
    """By kind, the families of the flights that were refused, but for the kinds that spoil a flight throughout."""
    refused = {name: Counter(o.family for o in group if o.refused) for name, group in rows.items()}
    partial = {name: families for name, families in refused.items() if families.total() < len(rows[name])}
    if any(partial.values()):
        print("\nrefused, with too little of the flight left:")
    for name, families in partial.items():
        if families:
            print(f"  {name:20s} {', '.join(f'{family} {count}' for family, count in families.items())}")


def print_tables(outcomes: Sequence[Outcome], *, misses: bool = True) -> None:
    """Kinds, misses, sound flights."""
    rows: dict[str, list[Outcome]] = {}
    for outcome in outcomes:
        rows.setdefault(outcome.row, []).append(outcome)
    print(FAULT_HEADER)
    for name, group in sorted(rows.items(), key=lambda item: item[0] != SOUND):
        print(fault_row(name, group))
    missed = [o for name, group in rows.items() if name != SOUND for o in group if not o.off_s <= SPAN_S]
    if misses and missed:
        print("\nmissed, or with the span off by more than 3 s:")
        print("\n".join(miss_row(o) for o in missed))
    print_refusals(rows)
    sound = rows.get(SOUND, [])
    if not sound:
        return
    print(f"\n{'sound flights of':26s} {'flights':>7s} {'alarmed':>7s} {'%':>6s} {'s':>6s}  false alarms")
    for family in dict.fromkeys(o.family for o in sound):
        print(alarm_row(family, [o for o in sound if o.family == family]))
    print(alarm_row("all", sound))


def main(arguments: list[str] | None = None) -> int:
    """Run the campaign and print its tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("families", nargs="*", help="default: all good ones")
    parser.add_argument("--flights", type=int, default=100, help="with each kind of fault")
    parser.add_argument("--clean", type=int, default=500, help="without a fault")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--before-fit", action="store_true", help="neither fit nor leaks")
    parser.add_argument("--kinds", nargs="*", type=FaultKind, default=tuple(FaultKind))
    parser.add_argument("--processes", type=int, default=os.cpu_count() or 1)
    chosen = parser.parse_args(arguments)
    started = time.perf_counter()
    families = chosen.families or good_families()
    dealt = tasks(families, chosen.flights, chosen.clean, chosen.kinds, chosen.seed, fit=not chosen.before_fit)
    with threadpool_limits(1):
        print_tables(campaign(dealt, chosen.processes))
    print(f"\n{time.perf_counter() - started:.0f} s in {chosen.processes} processes")
    return 0


if __name__ == "__main__":
    sys.exit(main())

"""Campaign over the faults: is each kind found, where it is, and are sound flights left in peace?

    python -m tests.synthetic.fault_campaign --flights 100           every kind, every good family
    python -m tests.synthetic.fault_campaign --flights 500 --clean   false alarms alone
    python -m tests.synthetic.fault_campaign --before-fit            without the fit, so without leaks: much quicker

Each flight of a good family is looked at without a fault, with one of each kind at a random time in the air, and with
those that make a flight worthless from start to end. Prints, by kind, how many were found, how many of their spans are
right to 3 s and to one window (30 s) at both ends, and which other kinds were reported; by family, false alarms.
Sound flights and leaks go through the whole reduction; the other faults are judged before the fit, as there.
"""

import argparse
from collections import Counter
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field

import numpy as np

from service.domain.codes import FaultKind
from service.domain.results import Fault
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
SPAN_S = 3.0
WINDOW_S = 30.0


@dataclass(slots=True)
class Score:
    """How one kind of fault was found."""

    flights: int = 0
    found: int = 0
    within_span: int = 0
    within_window: int = 0
    others: Counter[str] = field(default_factory=Counter)
    missed: Counter[str] = field(default_factory=Counter)

    def add(self, sound: SimulatedFlight, broken: SimulatedFlight, faults: Iterable[Fault]) -> None:
        """Count the answer to a flight with one fault."""
        (truth,) = broken.faults
        start_s, end_s = told_span(sound, broken)
        near = [f for f in faults if f.start_s <= end_s + SPAN_S and f.end_s >= start_s - SPAN_S]
        same = [f for f in near if f.fault == truth.fault]
        self.flights += 1
        self.others.update({str(f.fault) for f in faults if f.fault != truth.fault})
        if not same:
            self.missed[broken.family] += 1
            return
        first_s, last_s = (start_s, end_s) if truth.fault is FaultKind.DEAD else _flown_s(sound)
        off_start = max(min(f.start_s for f in same), first_s) - start_s
        off_end = min(max(f.end_s for f in same), last_s) - end_s
        off = max(abs(off_start), abs(off_end))
        self.found += 1
        self.within_span += off <= SPAN_S
        self.within_window += off <= WINDOW_S

    def row(self, name: str) -> str:
        """One line of the table."""
        share = [
            f"{100 * count / max(self.flights, 1):6.1f}" for count in (self.found, self.within_span, self.within_window)
        ]
        return f"{name:22s} {self.flights:6d} {' '.join(share)}  others {dict(self.others)} missed {dict(self.missed)}"


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


def _flown_s(flight: SimulatedFlight) -> tuple[float, float]:
    """Lift-off and touch-down, or the ends of the log. [s]"""
    flown = flight.truth.time_s[~flight.truth.on_ground]
    return float(flown[0]), float(flown[-1])


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
    for number, kind in enumerate(kinds):
        rng = np.random.default_rng([seed, flight.index, number])
        yield str(kind), random_fault(flight, kind, rng)
        if kind in WORTHLESS:
            yield f"{kind} throughout", INJECTORS[kind](flight, whole_flight(flight), rng)


def good_families() -> tuple[str, ...]:
    """Families that hold a calibration and no fault."""
    return tuple(name for name, family in FAMILIES.items() if not family.refused and name not in ALREADY_FAULTY)


def campaign(
    families: Iterable[str], flights: int, seed: int, kinds: Iterable[FaultKind], *, fit: bool = True
) -> tuple[dict[str, Score], dict[str, Counter[str]]]:
    """Scores by row name, and kinds of false alarms by family (`flights` counts the sound flights looked at)."""
    scores: dict[str, Score] = {}
    alarms: dict[str, Counter[str]] = {}
    wanted = tuple(kind for kind in kinds if fit or kind is not FaultKind.LEAK)
    for family in families:
        alarms[family] = Counter()
        for flight in simulate_each(family, flights, seed):
            told = {str(fault.fault) for fault in _told(flight, fit)}
            alarms[family].update({"flights": 1, "alarmed": int(bool(told)), **dict.fromkeys(told, 1)})
            for name, broken in with_faults(flight, wanted, seed):
                if not _changes_anything(flight, broken):
                    continue
                found = _told(broken, broken.faults[0].fault is FaultKind.LEAK)
                scores.setdefault(name, Score()).add(flight, broken, found)
    return scores, alarms


def _told(flight: SimulatedFlight, fit: bool) -> tuple[Fault, ...]:
    return reduce_flight(flight.log, flight.settings).faults if fit else faults_before_fit(flight)


def _changes_anything(sound: SimulatedFlight, broken: SimulatedFlight) -> bool:
    """Spikes at random may have hit no sample of a slow sensor."""
    if broken.faults[0].fault is not FaultKind.SPIKES:
        return True
    assert sound.log.probe is not None
    assert broken.log.probe is not None
    return bool(np.any(sound.log.probe.impact_pressure_pa != broken.log.probe.impact_pressure_pa))


def main(arguments: list[str] | None = None) -> int:
    """Print both tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("families", nargs="*", help="default: all good ones")
    parser.add_argument("--flights", type=int, default=20, help="of each family")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--clean", action="store_true", help="sound flights alone")
    parser.add_argument("--before-fit", action="store_true", help="neither fit nor leaks")
    parser.add_argument("--kinds", nargs="*", type=FaultKind, default=tuple(FaultKind))
    chosen = parser.parse_args(arguments)
    families = chosen.families or good_families()
    scores, alarms = campaign(
        families, chosen.flights, chosen.seed, () if chosen.clean else chosen.kinds, fit=not chosen.before_fit
    )
    if scores:
        print(f"{'fault':22s} {'flights':>6s} {'found %':>6s} {'3 s %':>6s} {'30 s %':>6s}")
    for name, score in scores.items():
        print(score.row(name))
    print(f"\n{'sound flights of':26s} {'flights':>7s} {'alarmed':>7s}")
    for family, counts in alarms.items():
        kinds = {kind: count for kind, count in counts.items() if kind not in ("flights", "alarmed")}
        print(f"{family:26s} {counts['flights']:7d} {counts['alarmed']:7d} {kinds or ''}")
    total, alarmed = (sum(counts[key] for counts in alarms.values()) for key in ("flights", "alarmed"))
    print(f"{'all':26s} {total:7d} {alarmed:7d} {100 * alarmed / max(total, 1):.2f} %")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())

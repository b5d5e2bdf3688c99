"""Flights before the newest that stand apart, so that a bad one does not spoil the pool before anybody has excluded it.

In the order flown, each flight is held against those before it that were kept, and held back below the chance that
raises an alarm for a newest flight. What a flight was held back for does not change as others come, so a probe that has
changed is measured by the flights before the change, however many come after it. The first few were compared with
little or nothing; so while there are no more than `EARLY`, all those kept are also compared with one another.

One healthy flight in some hundred is held back like that. It returns if the flights beside it were kept and it stands
out by no more than the oddest of so many may (`APART` over their number: Bonferroni). Two in a row mean a change and
stay. In the end each of those kept must belong to the others by the same limit. So a pool of sound flights of whatever
number loses one of them in about 1 % of cases at most.
"""

from dataclasses import dataclass

import numpy as np

from service.domain.arrays import BoolArray, FloatArray, IntArray
from service.fleet.between_flights import Nodes, nodes_for, posterior, tallies
from service.fleet.changes import ALARM_CHANCE, FEWEST_EARLIER, columns
from service.fleet.mixtures import two_sided_chance
from service.fleet.records import FlightFactor

APART = 0.007
EARLY = 10


@dataclass(frozen=True, slots=True)
class _Flown:
    """Arrays (n,) in the order flown, and their tallies (n, 4, g)."""

    log_scale: FloatArray
    uncertainty: FloatArray
    each: FloatArray
    nodes: Nodes

    def chance(self, flights: int | IntArray, others: FloatArray) -> FloatArray:
        """(...) that flights of the same probe differ as much from others whose sums are (..., 4, g)."""
        known = posterior(others, self.nodes)
        own = np.asarray(self.uncertainty[flights])[..., np.newaxis] ** 2
        deviation = np.sqrt(known.variance + self.nodes.deviation**2 + own)
        return two_sided_chance(known.weight, known.mean, deviation, np.asarray(self.log_scale[flights]))

    def oddest(self, kept: IntArray) -> tuple[int, float]:
        """The flight that belongs least to the others of `kept`, and the chance of it.

        Sums of the others are added up from both ends: differences would lose digits.
        """
        each = self.each[kept]
        nothing = np.zeros_like(each[:1])
        before = np.cumsum(np.concatenate([nothing, each[:-1]]), axis=0)
        after = np.cumsum(np.concatenate([nothing, each[:0:-1]]), axis=0)[::-1]
        chance = self.chance(kept, before + after)
        at = int(np.argmin(chance))
        return int(kept[at]), float(chance[at])


def flights_apart(flights: list[FlightFactor]) -> BoolArray:
    """(n - 1,) which of the flights (n,), in the order flown, do not belong to the others; the newest is not asked."""
    count = len(flights) - 1
    if count <= FEWEST_EARLIER:
        return np.zeros(count, dtype=np.bool_)
    log_scale, uncertainty = columns(flights)
    log_scale = log_scale - float(np.median(log_scale))
    nodes = nodes_for(log_scale, uncertainty)
    flown = _Flown(log_scale, uncertainty, tallies(log_scale, uncertainty, nodes), nodes)
    limit = APART / count
    held = _held_when_flown(flown)
    apart = held[:-1] & ~_return(flown, held, limit)
    while (kept := np.flatnonzero(~apart)).size > FEWEST_EARLIER:
        odd, chance = flown.oddest(kept)
        if chance >= limit:
            break
        apart[odd] = True
    return apart


def _held_when_flown(flown: _Flown) -> BoolArray:
    """(n,) each flight against those before it that were kept; the first three are."""
    held = np.zeros(len(flown.log_scale), dtype=np.bool_)
    sums = np.zeros_like(flown.each[0])
    kept = 0
    for at in range(len(held)):
        held[at] = kept >= FEWEST_EARLIER and flown.chance(at, sums) < ALARM_CHANCE
        if held[at]:
            continue
        sums = sums + flown.each[at]
        kept += 1
        if FEWEST_EARLIER < kept <= EARLY:
            so_far = np.flatnonzero(~held[: at + 1])
            odd, chance = flown.oddest(so_far)
            if chance < APART / kept:
                held[odd] = True
                kept -= 1
                sums = flown.each[so_far[so_far != odd]].sum(axis=0)
    return held


def _return(flown: _Flown, held: BoolArray, limit: float) -> BoolArray:
    """(n - 1,) which of the flights held back are single and may well belong to those kept."""
    beside = np.zeros_like(held)
    beside[1:] |= held[:-1]
    beside[:-1] |= held[1:]
    single = np.flatnonzero((held & ~beside)[:-1])
    returns = np.zeros(len(held) - 1, dtype=np.bool_)
    others = flown.each[:-1][~held[:-1]].sum(axis=0)
    returns[single] = flown.chance(single, others) >= limit
    return returns

"""Between which limits chance leaves the figures of a program that meets its targets.

A coverage of `n` flights is marked when it contradicts every true coverage within its target (92 to 98 % for the 95 %
intervals, 62 to 74 % for the 68 % ones): when as few flights held the truth as the lower end gives with a chance below
0.05 / (2 m), or as many as the upper end does, m being all figures of the campaign (Bonferroni). So a program that
meets all targets earns a single mark in fewer than one campaign in twenty.
"""

from dataclasses import dataclass

import numpy as np
from scipy import stats

TARGETS = {95: (0.92, 0.98), 68: (0.62, 0.74)}
"""By nominal level in per cent (issue 3)."""
FALSE_MARKS = 0.05
WORST_RATIO = 1.03
WANTED_RATIO = {"light": 0.8, "moderate": 0.8}
"""Root mean square error over that of one fit per circle, at most (issue 3)."""
WORST_BIAS = 0.25
"""Bias over root mean square error, at most."""


@dataclass(frozen=True, slots=True)
class Coverage:
    """Share of `of` independent flights whose interval held the truth; a refused good flight counts and does not."""

    level: int
    share: float
    of: int


@dataclass(frozen=True, slots=True)
class Limits:
    """For a campaign of so many figures in all."""

    figures: int

    def band(self, level: int, flights: int) -> tuple[float, float]:
        """Lowest and highest share without a mark."""
        low, high = TARGETS[level]
        chance = FALSE_MARKS / (2 * self.figures)
        fewest, most = stats.binom.ppf(chance, flights, low), stats.binom.isf(chance, flights, high)
        return float(fewest) / flights, float(most) / flights

    def mark(self, coverage: Coverage) -> str:
        """`<` held too seldom, `>` too often, else a space."""
        if coverage.of == 0:
            return " "
        low, high = self.band(coverage.level, coverage.of)
        if coverage.share < low - 1e-9:
            return "<"
        return ">" if coverage.share > high + 1e-9 else " "

    def mark_ratio(self, family: str, ratio: float, deviation: float) -> str:
        """`!` where the ratio to one fit per circle is too large by more than chance."""
        limit = WANTED_RATIO.get(family, WORST_RATIO)
        return "!" if ratio > limit + self._reach() * deviation else " "

    def mark_bias(self, share: float, flights: int) -> str:
        """`!` where the bias, over the root mean square error, is too large by more than chance."""
        return "!" if share > WORST_BIAS + self._reach() / np.sqrt(max(flights, 1)) else " "

    def _reach(self) -> float:
        """Standard deviations that chance exceeds once in twenty campaigns."""
        return float(stats.norm.isf(FALSE_MARKS / self.figures))

"""Frozen records of the pooling of flights. Scales are worked on as natural logarithms: 0.01 is 1 %."""

import math
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum

from service.domain.results import Estimate


@dataclass(frozen=True, slots=True)
class FlightFactor:
    """What one accepted flight says of the probe.

    Raises
    ------
    ValueError : the scale is not finite, the uncertainty not finite and above zero, or the time has no zone.
    """

    flight: str
    flown_utc: datetime
    """Aware. Flights are taken in the order of it."""
    log_scale: float
    """ln of the total speed scale: with any factor that the recorder had applied, so that flights before and after the
    loading of a factor are alike."""
    standard_uncertainty: float
    """Of `log_scale`, within the flight."""

    def __post_init__(self) -> None:
        if not math.isfinite(self.log_scale):
            raise ValueError(f"The scale of flight {self.flight} is not finite.")
        if not 0 < self.standard_uncertainty < math.inf:
            raise ValueError(f"The uncertainty of flight {self.flight} is not finite and above zero.")
        if self.flown_utc.tzinfo is None:
            raise ValueError(f"The time of flight {self.flight} has no zone.")


@dataclass(frozen=True, slots=True)
class FlightShare:
    """A flight behind the pooled factor."""

    flight: str
    weight: float
    """Of its logarithm in the pooled one: they add up to 1, and a flight apart has 0."""
    apart: bool
    """Left out: it does not agree with the others."""


@dataclass(frozen=True, slots=True)
class Heterogeneity:
    """Cochran's test that the flights differ by no more than their own uncertainties."""

    statistic: float
    """Q, a chi-square if they do not."""
    degrees_of_freedom: int
    chance: float
    """Of a Q as large as this where flights agree."""


@dataclass(frozen=True, slots=True)
class PooledFactor:
    """The factor to load. Standard uncertainties are the half width of the interval over 1.96."""

    speed_scale: Estimate
    pressure_scale: Estimate
    next_flight: Estimate
    """Where the speed scale of the next flight will fall if nothing changes and it is as uncertain as these."""
    between_flights: Estimate | None
    """Standard deviation of ln speed scale from flight to flight, beyond the flights' own uncertainties: median and
    shortest 95 % interval. None with one flight: then 0.015 is assumed."""
    heterogeneity: Heterogeneity | None
    """None with one flight."""
    flights: tuple[FlightShare, ...]
    """In the order flown, those apart included."""


@dataclass(frozen=True, slots=True)
class ChangeTest:
    """Does the newest flight disagree with those before it? All None where fewer than three are before it."""

    flight: str | None
    difference: Estimate | None
    """ln speed scale of the newest flight minus the pooled one of the earlier; the interval holds zero in 95 % of the
    flights of a probe that has not changed."""
    statistic: float | None
    """`chance` as a deviate of the standard normal, with the sign of the difference."""
    chance: float | None
    """Of a difference as large as this, up or down, where the probe has not changed."""
    disagrees: bool


@dataclass(frozen=True, slots=True)
class DriftTest:
    """Does the scale move slowly? All None with fewer than four flights, or flights all at one time."""

    change: Estimate | None
    """Of ln speed scale from the first to the last flight, along the fitted line."""
    change_per_year: Estimate | None
    statistic: float | None
    """`chance` as a deviate of the standard normal, with the sign of the change."""
    chance: float | None
    """Of a change as large as this, up or down, where the scale does not move."""
    drifts: bool


class Recommendation(StrEnum):
    """What to do with the pooled factor."""

    LOAD_AFTER_VERIFICATION = "load_after_verification"
    KEEP = "keep"
    CHECK_PROBE = "check_probe"
    FLY_MORE = "fly_more"


@dataclass(frozen=True, slots=True)
class Advice:
    recommendation: Recommendation
    words: str
    flights: tuple[str, ...]
    """Those that the words name as being at odds with the rest."""


@dataclass(frozen=True, slots=True)
class Assessment:
    """All that the flights of one installation say of its probe."""

    pool: PooledFactor | None
    """None without flights."""
    newest: ChangeTest
    drift: DriftTest
    advice: Advice

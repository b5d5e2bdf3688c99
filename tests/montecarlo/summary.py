"""Outcomes of one family -> the figures of its row."""

from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.codes import Verdict
from tests.baselines import Baseline
from tests.montecarlo.limits import Coverage
from tests.montecarlo.outcome import CRASHED, Answer, Compared, Outcome, holds_an_answer
from tests.synthetic.families import FAMILIES

RESAMPLES = 400
COVERAGES = 11
"""Figures of a row that are held against a band: two levels of scale, wind north, east and both, airspeed; one of the
accepted ones."""
NAN = float("nan")


@dataclass(frozen=True, slots=True)
class Peer:
    """Another method on the same flights: its error and how often its intervals held the truth (shares)."""

    rms: float
    in_95: float
    in_68: float
    ratio: float
    """Root mean square error of the service over that of the method, on the flights where both have an answer."""
    ratio_deviation: float


@dataclass(frozen=True, slots=True)
class WindFigures:
    rms_mps: float
    """Of both components."""
    deviation_mps: float
    north: tuple[Coverage, Coverage]
    east: tuple[Coverage, Coverage]
    both: tuple[Coverage, Coverage]


@dataclass(frozen=True, slots=True)
class AirspeedFigures:
    rms_mps: float
    samples: tuple[Coverage, Coverage]
    """Mean over the flights of the share of samples held: an unbiased coverage, its spread at most binomial of them."""
    mean_rms_mps: float
    """Of the mean over the loiters of one flight."""


@dataclass(frozen=True, slots=True)
class Figures:
    """Of the flights that were answered; coverages count the refused good ones as misses. Scale figures relative."""

    rms: float
    bound: float
    bias: float
    deviation: float
    scale: tuple[Coverage, Coverage]
    accepted: Coverage
    """Of the scale, among the accepted flights."""
    circle: Peer
    textbook: Peer
    wind: WindFigures
    airspeed: AirspeedFigures

    @property
    def over_bound(self) -> float:
        return self.rms / self.bound

    @property
    def bias_share(self) -> float:
        return abs(self.bias) / self.rms if self.rms > 0.0 else 0.0


@dataclass(frozen=True, slots=True)
class FamilySummary:
    family: str
    verdicts: Counter[str]
    reasons: Counter[str]
    """First reason of the flights without an answer."""
    alarmed: int
    alarms: Counter[str]
    seconds: float
    """Mean time of a reduction."""
    figures: Figures | None
    """None where no flight was answered."""

    @property
    def flights(self) -> int:
        return self.verdicts.total()

    @property
    def answered(self) -> int:
        return self.verdicts[Verdict.ACCEPTED] + self.verdicts[Verdict.DOUBTFUL]

    @property
    def missed(self) -> int:
        """Flights without an answer that hold one, and crashes."""
        refused = self.verdicts[Verdict.REFUSED] if holds_an_answer(self.family) else 0
        return refused + self.verdicts[CRASHED]

    @property
    def must_be_refused(self) -> bool:
        return FAMILIES[self.family].refused


def summarise(family: str, outcomes: Sequence[Outcome]) -> FamilySummary:
    """The figures of a family's row."""
    answers = [outcome.answer for outcome in outcomes if outcome.answer is not None]
    accepted = [o.answer for o in outcomes if o.answer is not None and o.verdict == Verdict.ACCEPTED]
    counted = len(outcomes) if holds_an_answer(family) else len(answers)
    return FamilySummary(
        family=family,
        verdicts=Counter(outcome.verdict for outcome in outcomes),
        reasons=Counter(reason for o in outcomes if o.answer is None for reason in o.reasons[:1]),
        alarmed=sum(bool(outcome.false_alarms) for outcome in outcomes),
        alarms=Counter(kind for outcome in outcomes for kind in outcome.false_alarms),
        seconds=float(np.mean([outcome.seconds for outcome in outcomes])),
        figures=_figures(answers, accepted, counted) if answers else None,
    )


def _figures(answers: list[Answer], accepted: list[Answer], counted: int) -> Figures:
    error = np.array([answer.scale.error for answer in answers])
    return Figures(
        rms=root_mean_square(error),
        bound=root_mean_square(np.array([answer.bound for answer in answers])),
        bias=float(error.mean()),
        deviation=float(np.mean([answer.scale.deviation for answer in answers])),
        scale=_held([answer.scale for answer in answers], counted),
        accepted=_held([answer.scale for answer in accepted], len(accepted))[0],
        circle=_peer(error, [answer.by_circle for answer in answers]),
        textbook=_peer(error, [answer.by_textbook for answer in answers]),
        wind=_wind_figures(answers, counted),
        airspeed=_airspeed_figures(answers, counted),
    )


def _held(compared: Sequence[Compared], counted: int) -> tuple[Coverage, Coverage]:
    """Coverage at 95 and at 68 %, out of `counted` flights."""
    return _coverages(sum(c.in_95 for c in compared), sum(c.in_68 for c in compared), counted)


def _coverages(in_95: float, in_68: float, counted: int) -> tuple[Coverage, Coverage]:
    share = 1.0 / counted if counted else NAN
    return Coverage(95, in_95 * share, counted), Coverage(68, in_68 * share, counted)


def _wind_figures(answers: list[Answer], counted: int) -> WindFigures:
    north, east = [answer.north for answer in answers], [answer.east for answer in answers]
    together = north + east
    # the two components of one flight need not be independent: they count as one trial
    in_95, in_68 = 0.5 * sum(c.in_95 for c in together), 0.5 * sum(c.in_68 for c in together)
    return WindFigures(
        rms_mps=root_mean_square(np.array([c.error for c in together])),
        deviation_mps=float(np.mean([c.deviation for c in together])),
        north=_held(north, counted),
        east=_held(east, counted),
        both=_coverages(in_95, in_68, counted),
    )


def _airspeed_figures(answers: list[Answer], counted: int) -> AirspeedFigures:
    checks = [answer.airspeed for answer in answers if answer.airspeed is not None]
    if not checks:
        return AirspeedFigures(NAN, _coverages(0.0, 0.0, counted), NAN)
    return AirspeedFigures(
        rms_mps=root_mean_square(np.array([check.rms_mps for check in checks])),
        samples=_coverages(sum(c.share_in_95 for c in checks), sum(c.share_in_68 for c in checks), counted),
        mean_rms_mps=root_mean_square(np.array([check.mean_error_mps for check in checks])),
    )


def _peer(error: FloatArray, rows: Sequence[Baseline]) -> Peer:
    theirs = np.array([row.error for row in rows])
    known = np.isfinite(theirs)
    if not known.any():
        return Peer(NAN, NAN, NAN, NAN, NAN)
    ratio, deviation = paired_ratio(error[known], theirs[known])
    return Peer(
        root_mean_square(theirs[known]),
        _share_held(rows, lambda row: row.half_width_95),
        _share_held(rows, lambda row: row.half_width_68),
        ratio,
        deviation,
    )


def _share_held(rows: Sequence[Baseline], half_width: Callable[[Baseline], float]) -> float:
    """Of the flights where the method states an interval; NaN where there is none."""
    stated = [row for row in rows if np.isfinite(half_width(row))]
    return float(np.mean([abs(row.error) <= half_width(row) for row in stated])) if stated else NAN


def paired_ratio(mine: FloatArray, theirs: FloatArray) -> tuple[float, float]:
    """Ratio of root mean square errors on the same flights, and its standard error: flights drawn anew (bootstrap)."""
    drawn = np.random.default_rng(1).integers(0, mine.size, (RESAMPLES, mine.size))
    ratios = np.sqrt(np.mean(mine[drawn] ** 2, axis=1) / np.mean(theirs[drawn] ** 2, axis=1))
    deviation = float(ratios.std(ddof=1)) if mine.size > 1 else NAN
    return root_mean_square(mine) / root_mean_square(theirs), deviation


def root_mean_square(values: FloatArray) -> float:
    return float(np.sqrt(np.mean(values**2)))

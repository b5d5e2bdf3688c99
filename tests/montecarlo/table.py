"""The two tables of the campaign: of the scale, and of wind, airspeed, alarms."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import isnan

from service.domain.codes import Verdict
from tests.montecarlo.limits import Coverage, Limits
from tests.montecarlo.outcome import CRASHED
from tests.montecarlo.summary import FamilySummary, Figures, Peer

NAME_WIDTH = 26


@dataclass(frozen=True, slots=True)
class Column:
    """A title, the width of the cells, and what stands in them."""

    title: str
    width: int
    cell: Callable[[Figures, str, Limits], str]


@dataclass(frozen=True, slots=True)
class Group:
    title: str
    columns: tuple[Column, ...]

    @property
    def width(self) -> int:
        return sum(column.width + 1 for column in self.columns) - 1


def _number(title: str, width: int, form: str, value: Callable[[Figures], float], factor: float = 1.0) -> Column:
    def cell(figures: Figures, _family: str, _limits: Limits) -> str:
        number = factor * value(figures)
        return "-" if isnan(number) else format(number, form)

    return Column(title, width, cell)


def _percent(title: str, width: int, form: str, value: Callable[[Figures], float]) -> Column:
    return _number(title, width, form, value, 100.0)


def _held(title: str, coverage: Callable[[Figures], Coverage]) -> Column:
    """Per cent of flights, with its mark."""

    def cell(figures: Figures, _family: str, limits: Limits) -> str:
        held = coverage(figures)
        return f"{100 * held.share:.1f}{limits.mark(held)}" if held.of else "- "

    return Column(title + " ", 6, cell)


def _pair(coverages: Callable[[Figures], tuple[Coverage, Coverage]]) -> tuple[Column, Column]:
    return _held("95%", lambda f: coverages(f)[0]), _held("68%", lambda f: coverages(f)[1])


def _bias_share(figures: Figures, _family: str, limits: Limits) -> str:
    return f"{figures.bias_share:.2f}{limits.mark_bias(figures.bias_share, figures.scale[0].of)}"


def _ratio(figures: Figures, family: str, limits: Limits) -> str:
    peer = figures.circle
    if isnan(peer.ratio):
        return "- "
    return f"{peer.ratio:.2f}±{peer.ratio_deviation:.2f}{limits.mark_ratio(family, peer.ratio, peer.ratio_deviation)}"


def _peer(peer: Callable[[Figures], Peer]) -> tuple[Column, ...]:
    return (
        _percent("rms %", 6, ".3f", lambda f: peer(f).rms),
        _percent("95%", 3, ".0f", lambda f: peer(f).in_95),
        _percent("68%", 3, ".0f", lambda f: peer(f).in_68),
    )


SCALE_TABLE = (
    Group(
        "speed scale",
        (
            _percent("rms %", 6, ".3f", lambda f: f.rms),
            _percent("bound", 6, ".3f", lambda f: f.bound),
            _number("rms/b.", 6, ".2f", lambda f: f.over_bound),
            _percent("bias %", 7, "+.3f", lambda f: f.bias),
            Column("b./rms ", 7, _bias_share),
            _percent("stated", 6, ".3f", lambda f: f.deviation),
            *_pair(lambda f: f.scale),
        ),
    ),
    Group("accepted", (_held("95%", lambda f: f.accepted),)),
    Group("one fit per circle", (*_peer(lambda f: f.circle), Column("ratio ", 11, _ratio))),
    Group("textbook l. sq.", _peer(lambda f: f.textbook)),
)
OTHER_TABLE = (
    Group(
        "wind m/s",
        (
            _number("rms", 5, ".3f", lambda f: f.wind.rms_mps),
            _number("stated", 6, ".3f", lambda f: f.wind.deviation_mps),
        ),
    ),
    Group("north", _pair(lambda f: f.wind.north)),
    Group("east", _pair(lambda f: f.wind.east)),
    Group("both", _pair(lambda f: f.wind.both)),
    Group(
        "true airspeed m/s",
        (
            _number("rms", 5, ".3f", lambda f: f.airspeed.rms_mps),
            *_pair(lambda f: f.airspeed.samples),
            _number("of means", 8, ".3f", lambda f: f.airspeed.mean_rms_mps),
        ),
    ),
)


def _titles(groups: Sequence[Group], front: str) -> str:
    upper = " | ".join(group.title.center(group.width) for group in groups)
    lower = " | ".join(" ".join(column.title.rjust(column.width) for column in group.columns) for group in groups)
    return f"{'':{len(front)}s} | {upper}\n{front} | {lower}"


def _cells(groups: Sequence[Group], summary: FamilySummary, limits: Limits) -> str:
    """All cells of a row; empty where no flight was answered."""
    figures = summary.figures
    if figures is None:
        return ""
    return " | ".join(
        " ".join(column.cell(figures, summary.family, limits).rjust(column.width) for column in group.columns)
        for group in groups
    )


SCALE_FRONT = f"{'family':{NAME_WIDTH}s} {'n':>5s} {'acc':>4s} {'dbt':>4s} {'ref':>4s}"
OTHER_FRONT = f"{'family':{NAME_WIDTH}s}"


def scale_titles() -> str:
    return _titles(SCALE_TABLE, SCALE_FRONT)


def scale_row(summary: FamilySummary, limits: Limits) -> str:
    """Verdicts and scale of one family; misses are called out at its end."""
    verdicts = summary.verdicts
    counts = (verdicts[verdict] for verdict in (Verdict.ACCEPTED, Verdict.DOUBTFUL, Verdict.REFUSED))
    front = f"{summary.family:{NAME_WIDTH}s} {summary.flights:5d} " + " ".join(f"{count:4d}" for count in counts)
    return f"{front} | {_cells(SCALE_TABLE, summary, limits)}{_called_out(summary)}"


def _called_out(summary: FamilySummary) -> str:
    told = ""
    if summary.must_be_refused:
        refused = summary.verdicts[Verdict.REFUSED]
        told = f"refused {refused} of {summary.flights} ({100 * refused / summary.flights:.1f} %)"
        told += f" {dict(summary.reasons)}"
        if summary.answered:
            told = f"   <-- ANSWERED {summary.answered} of {summary.flights}; {told}"
    elif summary.missed:
        told = f"   <-- MISSED {summary.missed} of {summary.flights} {dict(summary.reasons)}"
    elif summary.reasons:
        told = f"   refused for {dict(summary.reasons)}"
    return told + (f"   <-- CRASHED {summary.verdicts[CRASHED]}" if summary.verdicts[CRASHED] else "")


def other_titles() -> str:
    return _titles(OTHER_TABLE, OTHER_FRONT) + " | false alarms; time of a reduction"


def other_row(summary: FamilySummary, limits: Limits) -> str:
    """Wind, airspeed, false alarms and time of one family."""
    alarms = f"{summary.alarmed} {dict(summary.alarms) or ''}".strip()
    cells = _cells(OTHER_TABLE, summary, limits) or "no answer"
    return f"{summary.family:{NAME_WIDTH}s} | {cells} | {alarms}; {summary.seconds:.2f} s"


def totals(summaries: Sequence[FamilySummary]) -> list[str]:
    """What is asked of all families together."""
    good = [s for s in summaries if not s.must_be_refused]
    bad = [s for s in summaries if s.must_be_refused]
    lines = []
    if good:
        flights = sum(s.flights for s in good)
        lines.append(f"flights without an answer that hold one: {sum(s.missed for s in good)} of {flights}")
        alarmed = sum(s.alarmed for s in good)
        lines.append(f"false alarms: {alarmed} of {flights} good flights ({100 * alarmed / flights:.2f} %)")
    if bad:
        refused = sum(s.verdicts[Verdict.REFUSED] for s in bad)
        lines.append(f"flights that hold no answer, refused: {refused} of {sum(s.flights for s in bad)}")
    crashed = sum(s.verdicts[CRASHED] for s in summaries)
    return [*lines, f"CRASHED: {crashed}"] if crashed else lines

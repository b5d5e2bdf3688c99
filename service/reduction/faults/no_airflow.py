"""No airflow: the reading has lost the gusts. Blocked with the drain closed (trapped), or open with an unknown zero.

Air never stands still: the one-second means of a sound probe scatter far more than its sample noise leaves in them, and
about as much in one half minute as in the next. Where they do not, once what follows the static pressure is taken out,
the probe senses no air. A closed probe still holds the total pressure of the moment it closed, so its reading rises as
the static pressure falls, one for one over the pressure scale; a sound aircraft that climbs on its own energy does the
opposite.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.spans import runs
from service.reduction.faults.blocked import blocked_message
from service.reduction.faults.blocks import MEDIAN_OF_CHI_SQUARE, SecondBlocks, second_blocks
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, only, probe_finding, span_of

WINDOWS: tuple[tuple[int, float], ...] = ((15, 0.03), (30, 0.15))
"""Blocks in a window, and the share of the flight's usual variance below which it is quiet. Short windows of sound
flights are quiet by chance more often. Shares from simulated sound flights: the quietest window of one in a hundred
flights through calm air kept 0.06 and 0.13."""
WINDOWS_SLOW: tuple[tuple[int, float], ...] = ((15, 0.02), (30, 0.07))
"""The same where too few samples per second tell no noise."""
NOISE_RATIO = 2.0
"""Variance over what noise explains: chi-square of a quiet window of 30 stays below it, sound ones above 2.4."""
SOUND_RATIO = 4.0
WHITE_RATIO = 0.5
"""Half the mean square step over the variance: 1 for white noise, far less for gusts seen once a second."""
FEWEST_SOUND = 0.1
"""Share of windows that must be sound for the flight to tell what is usual."""
FEWEST_WINDOWS = 30
"""A window more per second: half a minute and one window. Less tells nothing of what is usual."""
WHOLE_FLIGHT_SHARE = 0.002
"""Of the dynamic pressure by GPS: a whole flight that varies less than this senses no air."""
MOST_MISSING = 0.2
CHUNK = 20000
"""Windows looked at together, to bound the memory."""
LEAST_CONTRAST, MOST_CONTRAST = 2.0, 100.0
MOST_MISFIT = 12.0
"""Of one block, half its square: a lone outlier does not end a span."""
SLOPE_DEVIATIONS = 6.0
UNEXPLAINED_SHARE = 0.25
"""Of the reading's variance: more than the altitude leaves unexplained is no trapped pressure."""
SINK_SHARE = 0.2
SINK_NOISE = 3.0
SINK_PER_BLOCK = 1.3
"""A drained line that sinks with a time constant below 3 s is this much nearer to its end after each second."""
NOTHING_SHARE = 0.1
FEWEST_ELSEWHERE = 10
"""Blocks outside of a span that tell the usual reading."""


@dataclass(frozen=True, slots=True)
class _Windows:
    """Sliding windows of `length` blocks, each array (k - length + 1,): reading regressed on static pressure."""

    length: int
    valid: BoolArray
    variance_pa2: FloatArray
    noise_pa2: FloatArray
    white: FloatArray
    excess_pa2: FloatArray
    """Covariance of neighbouring residuals: the part of the variance that is no noise."""


@dataclass(frozen=True, slots=True)
class _Still:
    """A span of blocks `first` to before `last` without airflow: reading = level + slope * static pressure + noise."""

    first: int
    last: int
    level_pa: float
    slope: float
    slope_uncertainty: float
    deviation_pa: float

    def misfit(self, blocks: SecondBlocks) -> FloatArray:
        """(k,) of every block, in standard deviations; NaN where a block is missing."""
        static = np.zeros(blocks.reading_pa.size) if self.slope == 0.0 else blocks.static_pa
        return (blocks.reading_pa - self.level_pa - self.slope * static) / self.deviation_pa


def find_no_airflow(evidence: FlightEvidence) -> list[Finding]:
    """Spans in flight without gusts in the reading: trapped if it follows the altitude, blocked if it fell."""
    if evidence.series.time_s.size < min(length for length, _ in WINDOWS):
        return []
    blocks = second_blocks(evidence)
    findings = []
    for still in _joined(blocks, [_fitted(blocks, first, last) for first, last in runs(_quiet(blocks))]):
        samples = only(evidence.series.time_s.size, int(blocks.start[still.first]), int(blocks.start[still.last]))
        kind = _kind(evidence, blocks, still)
        if samples.any() and kind is not None:
            findings.append(_finding(evidence.series.time_s, kind, samples))
    return findings


def _finding(time_s: FloatArray, kind: FaultKind, samples: BoolArray) -> Finding:
    start_s, end_s = span_of(time_s, samples)
    if kind is FaultKind.BLOCKED:
        return probe_finding(kind, time_s, samples, blocked_message(start_s, end_s))
    message = (
        f"The reading shows no gusts and follows the altitude from {start_s:.1f} s to {end_s:.1f} s: ram hole and "
        "drain are most likely blocked and hold the pressure of that moment. Clear and blow-test the probe."
    )
    return probe_finding(kind, time_s, samples, message)


def _kind(evidence: FlightEvidence, blocks: SecondBlocks, still: _Still) -> FaultKind | None:
    """None where the air was only quiet: the reading neither follows the altitude nor fell."""
    inside = slice(still.first, still.last)
    scatter = float(np.nanvar(blocks.reading_pa[inside]))
    follows = -still.slope > SLOPE_DEVIATIONS * still.slope_uncertainty
    if follows and still.deviation_pa**2 < UNEXPLAINED_SHARE * scatter:
        return FaultKind.TRAPPED
    level, expected = float(np.nanmedian(blocks.reading_pa[inside])), float(np.median(blocks.expected_pa[inside]))
    if evidence.zero is not None:
        # a reading far above a known zero senses air, however steady the airspeed is held
        blocked = abs(level - evidence.zero.value_pa) < NOTHING_SHARE * expected
    else:
        blocked = not _usual_level(blocks, inside) - level < SINK_SHARE * expected
    return FaultKind.BLOCKED if blocked else None


def _usual_level(blocks: SecondBlocks, but: slice) -> float:
    """Median reading in flight outside of `but`; NaN where there is next to none."""
    elsewhere = blocks.airborne & np.isfinite(blocks.reading_pa)
    elsewhere[but] = False
    enough = elsewhere.sum() >= FEWEST_ELSEWHERE
    return float(np.median(blocks.reading_pa[elsewhere])) if enough else np.nan


def _quiet(blocks: SecondBlocks) -> BoolArray:
    """(k,) blocks that lie in a quiet window."""
    slow = bool(np.isnan(blocks.noise_pa2).all())
    quiet = np.zeros(blocks.reading_pa.size, dtype=bool)
    for length, share in WINDOWS_SLOW if slow else WINDOWS:
        if blocks.reading_pa.size < length:
            continue
        windows = _scan(blocks, length)
        still = _still_windows(windows, share, slow) | _still_flight(blocks, windows)
        for first, last in runs(still):
            quiet[first : last - 1 + length] = True
    return quiet


def _scan(blocks: SecondBlocks, length: int) -> _Windows:
    good = np.isfinite(blocks.reading_pa) & blocks.airborne
    share = sliding_window_view(good, length).mean(axis=1)
    valid = sliding_window_view(blocks.airborne, length).all(axis=1) & (share >= 1.0 - MOST_MISSING)
    if not valid.any():
        nothing = np.full(valid.size, np.nan)
        return _Windows(length, valid, nothing, nothing, nothing, nothing)
    index = np.arange(good.size)
    reading = np.interp(index, index[good], blocks.reading_pa[good])
    known = np.isfinite(blocks.static_pa)
    static = np.where(known, blocks.static_pa - np.mean(blocks.static_pa[known]), 0.0) if known.any() else 0.0 * reading
    noise = np.nan_to_num(blocks.noise_pa2)
    chunks = [slice(first, first + CHUNK + length - 1) for first in range(0, valid.size, CHUNK)]
    parts = [_regressions(reading[chunk], static[chunk], noise[chunk], length) for chunk in chunks]
    slope, variance, noise, white, covariance = (np.concatenate(columns) for columns in zip(*parts, strict=True))
    by_static = slope**2 * blocks.static_noise_pa2
    # The static pressure is a mean of two blocks: half of its noise is its neighbour's too.
    return _Windows(length, valid, variance, noise + by_static, white, covariance - 0.5 * by_static)


def _regressions(reading: FloatArray, static: FloatArray, noise: FloatArray, length: int) -> tuple[FloatArray, ...]:
    """Of every window: slope, variance about it, noise, whiteness, covariance of neighbours."""
    y, p = _centred(sliding_window_view(reading, length)), _centred(sliding_window_view(static, length))
    power = np.einsum("ij,ij->i", p, p)
    slope = np.minimum(np.einsum("ij,ij->i", y, p) / np.maximum(power, 1e-9), 0.0)
    rest = y - slope[:, None] * p
    square = np.einsum("ij,ij->i", rest, rest)
    variance = square / (length - 2)
    # The median, for one block with a step in it would pass for noise.
    usual_noise = np.median(sliding_window_view(noise, length), axis=1)
    white = 0.5 * np.mean(np.diff(rest, axis=1) ** 2, axis=1) / np.maximum(square / length, 1e-12)
    # Taking out mean and slope leaves white noise a covariance of -2 / length of its variance.
    covariance = np.mean(rest[:, 1:] * rest[:, :-1], axis=1) + 2.0 * variance / length
    return slope, variance, usual_noise, white, covariance


def _centred(windows: FloatArray) -> FloatArray:
    return np.asarray(windows - windows.mean(axis=1, keepdims=True))


def _still_windows(windows: _Windows, share: float, slow: bool) -> BoolArray:
    """Windows far quieter than the rest of the flight, with nothing left in them but noise."""
    if slow:
        sound = windows.valid
        white = windows.white > WHITE_RATIO
    else:
        sound = windows.valid & (windows.variance_pa2 > SOUND_RATIO * windows.noise_pa2)
        white = windows.variance_pa2 < NOISE_RATIO * windows.noise_pa2
    if sound.sum() < max(FEWEST_SOUND * windows.valid.sum(), FEWEST_WINDOWS):
        return np.zeros(windows.valid.size, dtype=bool)
    usual = float(np.median(windows.variance_pa2[sound]))
    return np.asarray(windows.valid & white & (windows.variance_pa2 < share * usual))


def _still_flight(blocks: SecondBlocks, windows: _Windows) -> BoolArray:
    """All valid windows, if not even all of them together hold anything but noise."""
    if windows.valid.sum() < FEWEST_WINDOWS:
        return np.zeros(windows.valid.size, dtype=bool)
    excess = float(np.median(windows.excess_pa2[windows.valid]))
    expected = float(np.median(blocks.expected_pa[blocks.airborne]))
    still = expected > 0.0 and excess < (WHOLE_FLIGHT_SHARE * expected) ** 2
    return windows.valid if still else np.zeros(windows.valid.size, dtype=bool)


def _fitted(blocks: SecondBlocks, first: int, last: int) -> _Still:
    """The span's own level and slope, its ends moved to where gusts begin, a sinking before it taken in."""
    usual_step = _usual_step(blocks, slice(first, last))
    for _ in range(2):
        still = _regressed(blocks, first, last)
        first, last = _edges(blocks, still, usual_step)
    still = _regressed(blocks, first, last)
    return replace(still, first=_before_sinking(blocks, still))


def _usual_step(blocks: SecondBlocks, but: slice) -> float:
    """Root mean square step from block to block in flight outside of `but`, outliers apart; infinite if too few."""
    step = np.diff(np.where(blocks.airborne, blocks.reading_pa, np.nan))
    step[but] = np.nan
    step = step[np.isfinite(step)]
    return float(np.sqrt(np.median(step**2) / MEDIAN_OF_CHI_SQUARE)) if step.size >= FEWEST_ELSEWHERE else np.inf


def _regressed(blocks: SecondBlocks, first: int, last: int) -> _Still:
    reading, static = blocks.reading_pa[first:last], blocks.static_pa[first:last]
    known = np.isfinite(reading)
    with_static = known & np.isfinite(static)
    y, p = reading[with_static], static[with_static]
    power = float(np.sum((p - p.mean()) ** 2)) if p.size > 2 else 0.0
    slope = min(float(np.sum((y - y.mean()) * (p - p.mean())) / power), 0.0) if power > 0.0 else 0.0
    rest = y - slope * p if slope < 0.0 else reading[known]
    level = float(np.median(rest))
    deviation = max(float(np.sqrt(np.mean((rest - rest.mean()) ** 2))), 1e-6)
    uncertainty = deviation / np.sqrt(power) if power > 0.0 else np.inf
    return _Still(first, last, level, slope, float(uncertainty), deviation)


def _edges(blocks: SecondBlocks, still: _Still, usual_step_pa: float) -> tuple[int, int]:
    """The likeliest first and last block: each scores the log-likelihood of noise about the span's own level and slope
    over that of a gust's step from its neighbour."""
    gain = np.log(np.clip(usual_step_pa / still.deviation_pa, LEAST_CONTRAST, MOST_CONTRAST))
    score = gain - np.minimum(0.5 * still.misfit(blocks) ** 2, MOST_MISFIT)
    score = np.where(blocks.airborne, np.nan_to_num(score, nan=0.0), -np.inf)
    middle = (still.first + still.last) // 2
    return middle - int(np.argmax(np.cumsum(score[middle::-1]))), middle + int(np.argmax(np.cumsum(score[middle:]))) + 1


def _before_sinking(blocks: SecondBlocks, still: _Still) -> int:
    """First block of a drained line's sinking to the level of the span; the span's own first where none led to it."""
    away = still.misfit(blocks) * still.deviation_pa
    noise, first = SINK_NOISE * still.deviation_pa, still.first
    while first > 0 and blocks.airborne[first - 1] and away[first - 1] > max(SINK_PER_BLOCK * away[first], 0.0) - noise:
        first -= 1
    return first if away[first] > SINK_SHARE * blocks.expected_pa[first] else still.first


def _joined(blocks: SecondBlocks, spans: Sequence[_Still]) -> list[_Still]:
    """Spans that grew into each other are fitted as one."""
    joined: list[_Still] = []
    for still in spans:
        if joined and still.first <= joined[-1].last:
            first, last = min(joined[-1].first, still.first), max(joined[-1].last, still.last)
            joined[-1] = _regressed(blocks, first, last)
        else:
            joined.append(still)
    return joined

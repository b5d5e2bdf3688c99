"""No airflow: the reading has lost the gusts. Blocked with the drain closed (trapped), or open with an unknown zero.

Air never stands still: the one-second means of a sound probe scatter far more than its sample noise leaves in them, and
about as much in one half minute as in the next. Where they do not, once what follows the static pressure is taken out,
the probe senses no air. A closed probe still holds the total pressure of the moment it closed, so its reading rises as
the static pressure falls, one for one over the pressure scale; a sound aircraft that climbs on its own energy does the
opposite.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.spans import runs
from service.reduction.faults.blocked import blocked_message, no_airflow_finding
from service.reduction.faults.blocks import MEDIAN_OF_CHI_SQUARE, SecondBlocks, second_blocks
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, only, span_of

WINDOWS: tuple[tuple[int, float], ...] = ((10, 0.005), (15, 0.015), (24, 0.06), (30, 0.2))
"""Blocks in a window, and the share of the flight's usual variance below which it is quiet. Short windows of sound
flights are quiet by chance more often: of 580 simulated ones the quietest of 10, 15 and 24 blocks kept 0.004, 0.009 and
0.087, and none of 30 came down to its noise. What is quiet by chance neither follows the altitude nor falls."""
WINDOWS_SLOW: tuple[tuple[int, float], ...] = ((15, 0.02), (30, 0.07))
"""The same where too few samples per second tell no noise."""
NOISE_RATIO = 2.0
"""Variance over what noise explains: chi-square of a quiet window of 30 stays below it, sound ones above 2.4."""
SOUND_RATIO = 4.0
WHITE_RATIO = 0.5
"""Half the mean square step over the variance: 1 for white noise, far less for gusts seen once a second."""
FEWEST_SOUND, FEWEST_SOUND_WINDOWS = 0.1, 15
"""Share and number of windows that must be sound for the flight to tell what is usual."""
FEWEST_WINDOWS = 30
"""A window more per second: half a minute and one window. Less tells nothing of a whole flight."""
WHOLE_FLIGHT_SHARE = 0.002
"""Of the dynamic pressure by GPS: a whole flight that varies less than this, in its median window, senses no air."""
WINDOW_EXCESS = 4.0
"""Of that variance, by which one window of such a flight may pass it."""
MOST_MISSING = 0.2
CHUNK = 20000
"""Windows looked at together, to bound the memory."""
LEAST_CONTRAST, MOST_CONTRAST = 2.0, 100.0
"""Usual step over deviation; where all the flight lost its gusts, the usual step is no more than noise."""
MOST_MISFIT = 12.0
"""Of one block, half its square: a lone outlier does not end a span,"""
MOST_GUST_MISFIT = 4.5
"""and no gust, however large, proves it."""
MARGIN = 1
"""Blocks at either end that the smoothing may have cost."""
MOST_MOVES = 8
"""Of the ends of a span: each takes in more of the altitude, and tells the slope better."""
SLOPE_DEVIATIONS = 6.0
UNEXPLAINED_SHARE = 0.25
"""Of the reading's variance: more than the altitude leaves unexplained is no trapped pressure."""
FEWEST_TRAPPED = 15
"""Blocks in which to see a reading follow the altitude; in fewer it may by chance."""
SCALE_FACTOR = 2.0
"""Between the probe's scale by the altitude and by GPS: both are rough."""
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
    middle_pa: float
    """Mean static pressure of the span, at which the level holds."""
    deviation_pa: float

    def line(self, blocks: SecondBlocks) -> FloatArray:
        """(k,) reading that the span foretells for every block. [Pa]"""
        return self.level_pa + self.slope * self._away(blocks)

    def deviation_of(self, blocks: SecondBlocks) -> FloatArray:
        """(k,) standard deviation about it, by noise and by what is not known of the slope. [Pa]"""
        away = self._away(blocks)
        by_slope = np.where(away == 0.0, 0.0, self.slope_uncertainty * away) if self.slope < 0.0 else 0.0 * away
        return np.asarray(np.hypot(self.deviation_pa, by_slope))

    def _away(self, blocks: SecondBlocks) -> FloatArray:
        return np.zeros(blocks.reading_pa.size) if self.slope == 0.0 else blocks.static_pa - self.middle_pa


def find_no_airflow(evidence: FlightEvidence) -> list[Finding]:
    """Spans in flight without gusts in the reading: trapped if it follows the altitude, blocked if it fell."""
    if evidence.series.time_s.size < min(length for length, _ in WINDOWS):
        return []
    blocks = second_blocks(evidence)
    findings = []
    for still in _joined(blocks, [_fitted(blocks, first, last) for first, last in runs(_quiet(blocks))]):
        kind = _kind(evidence, blocks, still)
        first = _before_sinking(blocks, still) if kind is FaultKind.BLOCKED else still.first
        first, last = max(first - MARGIN, 0), min(still.last + MARGIN, blocks.reading_pa.size)
        samples = only(evidence.series.time_s.size, int(blocks.start[first]), int(blocks.start[last]))
        samples &= evidence.airborne
        if samples.any() and kind is not None:
            findings.append(_finding(evidence, kind, samples))
    return findings


def _finding(evidence: FlightEvidence, kind: FaultKind, samples: BoolArray) -> Finding:
    time_s = evidence.series.time_s
    start_s, end_s = span_of(time_s, samples)
    message = blocked_message(start_s, end_s)
    if kind is FaultKind.TRAPPED:
        message = (
            f"The reading shows no gusts and follows the altitude from {start_s:.1f} s to {end_s:.1f} s: ram hole and "
            "drain are most likely blocked and hold the pressure of that moment. Clear and blow-test the probe."
        )
    return no_airflow_finding(kind, time_s, samples, evidence.airborne, message)


def _kind(evidence: FlightEvidence, blocks: SecondBlocks, still: _Still) -> FaultKind | None:
    """None where the air was only quiet: the reading neither follows the altitude nor fell."""
    inside = slice(still.first, still.last)
    if _follows_altitude(evidence, blocks, still):
        return FaultKind.TRAPPED
    level, expected = float(np.nanmedian(blocks.reading_pa[inside])), float(np.median(blocks.expected_pa[inside]))
    if evidence.zero is not None:
        if evidence.wind_known:
            return None  # `find_blocked` looks after this, and tells the ends better
        # a reading far above a known zero senses air, however steady the airspeed is held
        blocked = abs(level - evidence.zero.value_pa) < NOTHING_SHARE * expected
    else:
        sinking = slice(_before_sinking(blocks, still), still.last)
        blocked = not _usual(blocks, blocks.reading_pa, sinking) - level < SINK_SHARE * expected
    return FaultKind.BLOCKED if blocked else None


def _follows_altitude(evidence: FlightEvidence, blocks: SecondBlocks, still: _Still) -> bool:
    """Whether the altitude explains how the reading moves, one for one in the probe's own scale."""
    inside = slice(still.first, still.last)
    scatter = float(np.nanvar(blocks.reading_pa[inside]))
    follows = -still.slope > SLOPE_DEVIATIONS * still.slope_uncertainty
    if not follows or still.last - still.first < FEWEST_TRAPPED or still.deviation_pa**2 > UNEXPLAINED_SHARE * scatter:
        return False
    if evidence.zero is None:
        return True
    # what the probe makes of a pascal, by what it usually reads; a probe that never read anything else tells nothing
    sensed = (blocks.reading_pa - evidence.zero.value_pa) / np.maximum(blocks.expected_pa, 1.0)
    usual = _usual(blocks, sensed, inside)
    return not (-still.slope < usual / SCALE_FACTOR or -still.slope > usual * SCALE_FACTOR)


def _usual(blocks: SecondBlocks, values: FloatArray, but: slice) -> float:
    """Median of (k,) values in flight outside of `but`; NaN where there is next to nothing."""
    elsewhere = blocks.airborne & np.isfinite(values)
    elsewhere[but] = False
    return float(np.median(values[elsewhere])) if elsewhere.sum() >= FEWEST_ELSEWHERE else np.nan


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
    noise = noise + by_static
    return _Windows(length, valid, variance, noise, white, covariance - blocks.noise_overlap * noise)


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
    if sound.sum() < max(FEWEST_SOUND * windows.valid.sum(), FEWEST_SOUND_WINDOWS):
        return np.zeros(windows.valid.size, dtype=bool)
    usual = float(np.median(windows.variance_pa2[sound]))
    return np.asarray(windows.valid & white & (windows.variance_pa2 < share * usual))


def _still_flight(blocks: SecondBlocks, windows: _Windows) -> BoolArray:
    """Windows without gusts, of a flight most of which holds nothing but noise."""
    if windows.valid.sum() < FEWEST_WINDOWS:
        return np.zeros(windows.valid.size, dtype=bool)
    excess = float(np.median(windows.excess_pa2[windows.valid]))
    expected = float(np.median(blocks.expected_pa[blocks.airborne]))
    least = (WHOLE_FLIGHT_SHARE * expected) ** 2
    if expected <= 0.0 or excess >= least:
        return np.zeros(windows.valid.size, dtype=bool)
    return np.asarray(windows.valid & (windows.excess_pa2 < WINDOW_EXCESS * least))


def _fitted(blocks: SecondBlocks, first: int, last: int) -> _Still:
    """The span's own level and slope, its ends moved to where gusts begin."""
    usual_step = _usual_step(blocks, slice(first, last))
    for _ in range(MOST_MOVES):
        still = _regressed(blocks, first, last)
        first, last = _edges(blocks, still, usual_step)
        if (first, last) == (still.first, still.last):
            break
    return _regressed(blocks, first, last)


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
    middle = float(p.mean()) if p.size else 0.0
    power = float(np.sum((p - middle) ** 2)) if p.size > 2 else 0.0
    slope = min(float(np.sum((y - y.mean()) * (p - middle)) / power), 0.0) if power > 0.0 else 0.0
    rest = y - slope * (p - middle) if slope < 0.0 else reading[known]
    level = float(np.median(rest))
    deviation = max(float(np.sqrt(np.mean((rest - rest.mean()) ** 2))), 1e-6)
    uncertainty = deviation / np.sqrt(power) if power > 0.0 else np.inf
    return _Still(first, last, level, slope, float(uncertainty), middle, deviation)


def _edges(blocks: SecondBlocks, still: _Still, usual_step_pa: float) -> tuple[int, int]:
    """The likeliest first and last block: each block scores the log-likelihood of the span's own line, continued, over
    that of a gust's step from its neighbour towards the span."""
    middle = (still.first + still.last) // 2
    backward = _score(blocks, still, usual_step_pa, -1)[middle::-1]
    forward = _score(blocks, still, usual_step_pa, 1)[middle:]
    return middle - int(np.argmax(np.cumsum(backward))), middle + int(np.argmax(np.cumsum(forward))) + 1


def _score(blocks: SecondBlocks, still: _Still, usual_step_pa: float, outward: int) -> FloatArray:
    """(k,) in favour of the span's line, for a search that goes `outward` (1 later, -1 earlier)."""
    deviation = still.deviation_of(blocks)
    usual_step = np.clip(usual_step_pa, LEAST_CONTRAST * deviation, MOST_CONTRAST * deviation)
    step = np.diff(blocks.reading_pa, prepend=np.nan) if outward > 0 else np.diff(blocks.reading_pa, append=np.nan)
    gust_misfit = np.minimum(0.5 * (np.nan_to_num(step) / usual_step) ** 2, MOST_GUST_MISFIT)
    misfit = np.minimum(0.5 * ((blocks.reading_pa - still.line(blocks)) / deviation) ** 2, MOST_MISFIT)
    score = np.log(usual_step / deviation) + gust_misfit - misfit
    return np.where(blocks.airborne, np.nan_to_num(score, nan=0.0), -np.inf)


def _before_sinking(blocks: SecondBlocks, still: _Still) -> int:
    """First block of a drained line's sinking to the level of the span; the span's own first where none led to it."""
    away = blocks.reading_pa - still.line(blocks)
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

"""One-second means of reading and static pressure, with what sample noise alone would leave in them.

A mean of a second smooths the sensor's noise and keeps the gusts: what scatters in it more than noise explains is air.
Both pressures are smoothed over the same samples, else the beginning of a climb would look like a gust.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy.ndimage import convolve1d, uniform_filter1d

from service.airdata.constants import STANDARD_GRAVITY_MPS2
from service.domain.arrays import BoolArray, FloatArray, IntArray
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.held_values import rounding_step

BLOCK_S = 1.0
FEWEST_TO_TELL_NOISE = 4
"""Samples in a block from which their own differences tell the noise."""
STATIC_SMOOTHING_S = 0.5
"""Of the static pressure: short, so that reading and static pressure stay smoothed alike where a climb begins."""
SMOOTHING = np.array([0.25, 0.5, 0.25])
MOST_EMPTY = 10
"""More than a window may miss."""
MEDIAN_OF_CHI_SQUARE = 0.4549
"""Of one degree of freedom: turns a median square into a mean square."""
ROUNDING_VARIANCE = 1.0 / 12.0
STANDARD_DENSITY_KGPM3 = 1.225
"""Turns GPS altitude into static pressure where no static sensor is: only the direction counts."""


@dataclass(frozen=True, slots=True)
class SecondBlocks:
    """Consecutive blocks (k,) from the first to the last sample."""

    start: IntArray
    """(k + 1,) index of each block's first sample; a block may be empty."""
    reading_pa: FloatArray
    """NaN where the block holds less than half of its samples."""
    noise_pa2: FloatArray
    """Variance that sample noise leaves in each mean; NaN where the samples are too few to tell."""
    static_pa: FloatArray
    """Means of the static pressure, less that of the start, at the times of the same samples; NaN where unknown."""
    static_noise_pa2: float
    """Variance that sample noise leaves in them."""
    noise_overlap: float
    """Correlation of the noise of neighbours."""
    airborne: BoolArray
    """Every sample of the block is in the air."""
    expected_pa: FloatArray


def second_blocks(evidence: FlightEvidence) -> SecondBlocks:
    """Blocks of a second, or of one sample where the probe is slower; a gap in time leaves a few empty ones."""
    time_s = evidence.series.time_s
    length_s = max(BLOCK_S, evidence.interval_s)
    usual = max(round(length_s / evidence.interval_s), 1)
    number = _numbers(time_s, length_s, single=usual == 1)
    start = np.searchsorted(number, np.arange(number[-1] + 2))
    known = np.isfinite(evidence.reading_pa)
    count, total = _sums(start, known.astype(np.float64)), _sums(start, np.where(known, evidence.reading_pa, 0.0))
    enough = count >= max(0.5 * usual, 1.0)
    size = np.maximum(np.diff(start), 1)
    static = _static(evidence)
    static_pa = _sums(start, np.where(known, np.interp(time_s, static.time_s, static.pressure_pa), 0.0))
    static_span_s = max((usual - 1) * evidence.interval_s, STATIC_SMOOTHING_S)
    own = max(static_span_s / static.interval_s, 1.0)
    tells_noise = usual >= FEWEST_TO_TELL_NOISE
    blocks = SecondBlocks(
        start=start,
        reading_pa=np.where(enough, total / np.maximum(count, 1.0), np.nan),
        noise_pa2=_noise(evidence, start) / size if tells_noise else np.full(size.size, np.nan),
        static_pa=np.where(enough, static_pa / np.maximum(count, 1.0), np.nan),
        static_noise_pa2=static.noise_pa2 / own,
        noise_overlap=0.0,
        airborne=_sums(start, (~evidence.moving).astype(np.float64)) == 0,
        expected_pa=_sums(start, np.nan_to_num(evidence.expected_pa)) / size,
    )
    return _smoothed(blocks) if tells_noise else blocks


def _smoothed(blocks: SecondBlocks) -> SecondBlocks:
    """Each block with half the weight of either neighbour's: the static sensor's noise hides gusts in calm air."""
    known = np.isfinite(blocks.reading_pa)
    weight = convolve1d(known.astype(np.float64), SMOOTHING, mode="constant")

    def mean(values: FloatArray) -> FloatArray:
        total = convolve1d(np.where(known, values, 0.0), SMOOTHING, mode="constant")
        return np.where(known, total / np.maximum(weight, SMOOTHING[1]), np.nan)

    left = float(np.sum(SMOOTHING**2))
    return replace(
        blocks,
        reading_pa=mean(blocks.reading_pa),
        noise_pa2=left * blocks.noise_pa2,
        static_pa=mean(blocks.static_pa),
        static_noise_pa2=left * blocks.static_noise_pa2,
        noise_overlap=float(np.sum(SMOOTHING[1:] * SMOOTHING[:-1])) / left,
    )


def _numbers(time_s: FloatArray, length_s: float, single: bool) -> IntArray:
    """(n,) block number of each sample; a gap counts as no more than MOST_EMPTY blocks, for a log may span years."""
    if single:
        steps = np.maximum(np.round(np.diff(time_s) / length_s), 1.0)
    else:
        steps = np.diff(np.floor((time_s - time_s[0]) / length_s))
    return np.concatenate([[0], np.cumsum(np.minimum(steps, MOST_EMPTY + 1))]).astype(np.int64)


def _sums(start: IntArray, values: FloatArray) -> FloatArray:
    """(k,) sums of (n,) values over the blocks between consecutive starts (k + 1,)."""
    running = np.concatenate([[0.0], np.cumsum(values)])
    return np.asarray(running[start[1:]] - running[start[:-1]])


def _noise(evidence: FlightEvidence, start: IntArray) -> FloatArray:
    """(k,) variance of one sample, from the differences of neighbours: half their mean square."""
    square = 0.5 * np.diff(evidence.reading_pa, prepend=np.nan) ** 2
    known = np.isfinite(square)
    count, total = _sums(start, known.astype(np.float64)), _sums(start, np.where(known, square, 0.0))
    return total / np.maximum(count, 1.0)


@dataclass(frozen=True, slots=True)
class _Static:
    """Static pressure, less its first, on its own times, smoothed; NaN, at one time, where it is unknown."""

    time_s: FloatArray
    pressure_pa: FloatArray
    interval_s: float
    noise_pa2: float
    """Variance of one sample before smoothing."""


def _static(evidence: FlightEvidence) -> _Static:
    series = evidence.series
    if evidence.static is not None and not series.standard_static:
        time_s, pressure = evidence.static.time_s, evidence.static.static_pressure_pa
    else:
        time_s = series.gps_time_s
        pressure = -STANDARD_DENSITY_KGPM3 * STANDARD_GRAVITY_MPS2 * series.gps_altitude_m
    known = np.isfinite(pressure)
    time_s, pressure = time_s[known], pressure[known]
    if time_s.size < 3:
        return _Static(np.zeros(1), np.full(1, np.nan), 1.0, 0.0)
    interval_s = max(float(np.median(np.diff(time_s))), 1e-6)
    width = int(np.clip(STATIC_SMOOTHING_S / interval_s, 1.0, time_s.size)) | 1
    noise = 0.5 * float(np.median(np.diff(pressure) ** 2)) / MEDIAN_OF_CHI_SQUARE
    noise += ROUNDING_VARIANCE * min(rounding_step(pressure) ** 2, noise)
    # from the first: only differences count, and sums of long flights keep their digits
    smooth = uniform_filter1d(pressure - pressure[0], width, mode="nearest")
    return _Static(time_s, smooth, interval_s, noise)

"""One-second means of reading and static pressure, with what sample noise alone would leave in them.

A mean of a second smooths the sensor's noise and keeps the gusts: what scatters in it more than noise explains is air.
"""

from dataclasses import dataclass

import numpy as np

from service.airdata.constants import STANDARD_GRAVITY_MPS2
from service.domain.arrays import BoolArray, FloatArray, IntArray
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.held_values import rounding_step

BLOCK_S = 1.0
FEWEST_TO_TELL_NOISE = 4
"""Samples in a block from which their own differences tell the noise."""
STATIC_HALF_WINDOW_S = 1.0
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
    """Smoothed static pressure; NaN where unknown."""
    static_noise_pa2: float
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
    middle_s = time_s[np.minimum((start[:-1] + start[1:]) // 2, time_s.size - 1)]
    static_pa, static_noise_pa2 = _static(evidence, middle_s)
    return SecondBlocks(
        start=start,
        reading_pa=np.where(enough, total / np.maximum(count, 1.0), np.nan),
        noise_pa2=_noise(evidence, start) / size if usual >= FEWEST_TO_TELL_NOISE else np.full(size.size, np.nan),
        static_pa=static_pa,
        static_noise_pa2=static_noise_pa2,
        airborne=_sums(start, (~evidence.moving).astype(np.float64)) == 0,
        expected_pa=_sums(start, np.nan_to_num(evidence.expected_pa)) / size,
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


def _static(evidence: FlightEvidence, middle_s: FloatArray) -> tuple[FloatArray, float]:
    """Static pressure about each time, mean of two seconds, and the variance that sample noise leaves in it."""
    series = evidence.series
    if evidence.static is not None and not series.standard_static:
        time_s, pressure = evidence.static.time_s, evidence.static.static_pressure_pa
    else:
        time_s = series.gps_time_s
        pressure = -STANDARD_DENSITY_KGPM3 * STANDARD_GRAVITY_MPS2 * series.gps_altitude_m
    known = np.isfinite(pressure)
    time_s, pressure = time_s[known], pressure[known]
    if time_s.size < 3:
        return np.full(middle_s.size, np.nan), 0.0
    low = np.searchsorted(time_s, middle_s - STATIC_HALF_WINDOW_S)
    high = np.searchsorted(time_s, middle_s + STATIC_HALF_WINDOW_S)
    reference = float(pressure[0])
    running = np.concatenate([[0.0], np.cumsum(pressure - reference)])
    mean = reference + (running[high] - running[low]) / np.maximum(high - low, 1)
    static_pa = np.where(high > low, mean, np.interp(middle_s, time_s, pressure))
    sample = 0.5 * float(np.median(np.diff(pressure) ** 2)) / MEDIAN_OF_CHI_SQUARE
    sample += ROUNDING_VARIANCE * min(rounding_step(pressure) ** 2, sample)
    return static_pa, sample / max(float(np.median(high - low)), 1.0)

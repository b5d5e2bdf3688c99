"""GPS samples of the loiters, gathered into blocks along the path that the fit works on.

Residuals and their derivatives are averaged over a block, never the velocity vectors (an averaged vector is shorter:
the method notes' third trap). A block spans a small part of a turn; a long flight is thinned to whole turns spread
evenly over it, since neighbouring turns tell little more than one of them.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.domain.arrays import BoolArray, FloatArray, IntArray
from service.domain.codes import Direction
from service.domain.results import AirDataSeries, Loiter

BLOCKS_PER_TURN = 48
MOST_BLOCKS = 320
LEG_BLOCK_S = 1.5
"""Length of a block on patterns of legs."""
LEG_MEMORY_S = 25.0
"""Over this time the motion on legs is smoothed where circles use one turn."""
FEWEST_TURN_BLOCKS = 10
MOST_PER_BLOCK = 30
"""Samples of a block that are used, evenly spread: more are recorded only above 10 Hz, and tell the same again."""


@dataclass(frozen=True, slots=True)
class Blocks:
    """`m` GPS samples in `k` blocks, samples ordered by block.

    `memory` is, for each loiter, the number of blocks over which its motion is smoothed: one turn.
    """

    time_s: FloatArray
    """(m,)"""
    velocity_mps: FloatArray
    """(m, 3) north, east, down."""
    altitude_m: FloatArray
    """(m,)"""
    starts: IntArray
    """(k,) index of each block's first sample."""
    counts: FloatArray
    """(k,) samples of each block."""
    loiter: IntArray
    """(k,) index of the loiter of each block."""
    memory: IntArray
    """(number of loiters,)"""
    seconds: float
    """Length of a block."""

    def mean(self, values: FloatArray) -> FloatArray:
        """(k, ...) block means of (m, ...) values."""
        total = np.add.reduceat(values, self.starts, axis=0)
        return total / (self.counts if values.ndim == 1 else self.counts[:, None])

    def keep(self, samples: BoolArray) -> "Blocks":
        """The blocks without the samples that are False in (m,) `samples`; empty blocks vanish."""
        block_of = np.repeat(np.arange(self.starts.size), self.counts.astype(np.int64))[samples]
        counts = np.bincount(block_of, minlength=self.starts.size)
        left = counts > 0
        starts = np.concatenate([[0], np.cumsum(counts[left])[:-1]]).astype(np.int64)
        return Blocks(
            time_s=self.time_s[samples],
            velocity_mps=self.velocity_mps[samples],
            altitude_m=self.altitude_m[samples],
            starts=starts,
            counts=counts[left].astype(np.float64),
            loiter=self.loiter[left],
            memory=self.memory,
            seconds=self.seconds,
        )


def gather_blocks(series: AirDataSeries, loiters: Sequence[Loiter]) -> Blocks | None:
    """Blocks of the loiters that are `used`; None where no sample lies in one."""
    interval_s = float(np.median(np.diff(series.gps_time_s))) if series.gps_time_s.size > 1 else 1.0
    seconds = _block_seconds([loiter for loiter in loiters if loiter.used], interval_s)
    blocks = _blocks_of(series, loiters, seconds)
    # the first turn of every loiter stays, so thinning alone may leave too many
    while blocks is not None and blocks.starts.size > 1.5 * MOST_BLOCKS:
        seconds *= 1.5
        blocks = _blocks_of(series, loiters, seconds)
    return blocks


def _blocks_of(series: AirDataSeries, loiters: Sequence[Loiter], seconds: float) -> Blocks | None:
    indices, keys, memory = [], [], np.ones(len(loiters), dtype=np.int64)
    for index, loiter in enumerate(loiters):
        if not loiter.used:
            continue
        inside = np.flatnonzero(
            (series.gps_time_s >= loiter.start_s) & (series.gps_time_s <= loiter.end_s) & ~series.gps_on_ground
        )
        memory[index] = max(round(_memory_seconds(loiter) / seconds), 1)
        number = ((series.gps_time_s[inside] - loiter.start_s) / seconds).astype(np.int64)
        indices.append(inside)
        keys.append(np.column_stack([np.full(inside.size, index), number]))
    if not indices or sum(i.size for i in indices) == 0:
        return None
    sample, key = np.concatenate(indices), np.concatenate(keys)
    kept = _thinned(key, memory)
    sample, key = sample[kept], key[kept]
    kept = _few_per_block(key)
    sample, key = sample[kept], key[kept]
    first = np.flatnonzero(_begins_block(key))
    return Blocks(
        time_s=series.gps_time_s[sample],
        velocity_mps=np.column_stack(
            [series.velocity_north_mps[sample], series.velocity_east_mps[sample], series.velocity_down_mps[sample]]
        ),
        altitude_m=series.gps_altitude_m[sample],
        starts=first,
        counts=np.diff(np.concatenate([first, [sample.size]])).astype(np.float64),
        loiter=key[first, 0],
        memory=memory,
        seconds=seconds,
    )


def _memory_seconds(loiter: Loiter) -> float:
    if loiter.direction is Direction.STRAIGHT:
        return LEG_MEMORY_S
    return (loiter.end_s - loiter.start_s) / max(loiter.turns, 0.5)


def _block_seconds(loiters: Sequence[Loiter], interval_s: float) -> float:
    total = sum(loiter.end_s - loiter.start_s for loiter in loiters)
    shortest = min(
        (
            LEG_BLOCK_S if loiter.direction is Direction.STRAIGHT else _memory_seconds(loiter) / BLOCKS_PER_TURN
            for loiter in loiters
        ),
        default=interval_s,
    )
    coarsest = shortest * BLOCKS_PER_TURN / FEWEST_TURN_BLOCKS
    return max(interval_s, min(max(shortest, total / MOST_BLOCKS), coarsest))


def _thinned(key: IntArray, memory: IntArray) -> BoolArray:
    """(m,) whether each sample stays: whole turns, evenly spread, until no more than MOST_BLOCKS blocks are left."""
    keep_share = MOST_BLOCKS / max(int(_begins_block(key).sum()), 1)
    if keep_share >= 1.0:
        return np.ones(key.shape[0], dtype=bool)
    turn = key[:, 1] // memory[key[:, 0]]
    # a low-discrepancy pick keeps turns spread over every loiter and always the first of each
    picked = np.floor((turn + 1) * keep_share) > np.floor(turn * keep_share)
    return np.asarray(picked | (turn == 0))


def _begins_block(key: IntArray) -> BoolArray:
    """(m,) whether a sample is the first of its block; samples stand by block."""
    return np.concatenate([[True], (np.diff(key, axis=0) != 0).any(axis=1)])


def _few_per_block(key: IntArray) -> BoolArray:
    """(m,) whether each sample stays, so that no block has more than MOST_PER_BLOCK."""
    first = np.flatnonzero(_begins_block(key))
    counts = np.diff(np.concatenate([first, [len(key)]]))
    rank = np.arange(len(key)) - np.repeat(first, counts)
    step = np.repeat(-(-counts // MOST_PER_BLOCK), counts)
    return np.asarray(rank % step == 0)

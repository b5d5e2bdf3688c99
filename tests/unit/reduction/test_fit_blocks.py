"""GPS samples gathered into blocks of the loiters."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from service.domain.codes import Direction
from service.domain.results import Loiter
from service.reduction.fit.blocks import MOST_BLOCKS, Blocks, gather_blocks
from tests.unit.reduction.constructed import series_of


def loiter(start_s: float, end_s: float, turns: float, direction: Direction = Direction.LEFT) -> Loiter:
    return Loiter(start_s, end_s, turns, direction, 360.0, 17.0, True)


def gathered(samples: int, *loiters: Loiter) -> Blocks:
    heading = 2.0 * np.pi * 0.2 * np.arange(samples) / 30.0
    series = series_of(
        np.full(samples, 170.0),
        0.2,
        velocity_north_mps=17.0 * np.cos(heading),
        velocity_east_mps=17.0 * np.sin(heading),
    )
    blocks = gather_blocks(series, loiters)
    assert blocks is not None
    return blocks


def test_blocks_are_small_parts_of_a_turn() -> None:
    blocks = gathered(1000, loiter(10.0, 70.0, 2.0), loiter(100.0, 190.0, 3.0))
    assert set(blocks.loiter.tolist()) == {0, 1}
    assert blocks.counts.sum() == blocks.time_s.size
    assert 0.2 <= blocks.seconds <= 30.0 / 10.0
    assert blocks.memory.tolist() == [round(30.0 / blocks.seconds)] * 2
    assert np.all((blocks.time_s >= 10.0) & (blocks.time_s <= 190.0))
    assert not np.any((blocks.time_s > 70.0) & (blocks.time_s < 100.0))


def test_the_mean_is_over_the_samples_of_each_block() -> None:
    blocks = gathered(1000, loiter(10.0, 70.0, 2.0))
    means = blocks.mean(blocks.time_s)
    starts = [*blocks.starts.tolist(), blocks.time_s.size]
    expected = [blocks.time_s[a:b].mean() for a, b in pairwise(starts)]
    assert means == pytest.approx(expected)
    assert blocks.mean(blocks.velocity_mps).shape == (means.size, 3)


def test_dropped_samples_take_empty_blocks_with_them() -> None:
    blocks = gathered(1000, loiter(10.0, 70.0, 2.0))
    some = blocks.time_s > 40.0
    left = blocks.keep(some)
    assert left.time_s.size == some.sum()
    assert left.counts.sum() == some.sum()
    assert left.starts.size < blocks.starts.size
    assert np.all(left.counts > 0)
    assert left.mean(left.time_s).min() > 40.0


def test_a_long_flight_is_thinned_to_turns_spread_over_it() -> None:
    blocks = gathered(30000, *(loiter(600.0 * k, 600.0 * k + 590.0, 20.0) for k in range(10)))
    assert blocks.starts.size <= 1.3 * MOST_BLOCKS
    assert set(blocks.loiter.tolist()) == set(range(10))


def test_loiters_that_do_not_serve_are_left_out() -> None:
    series = series_of(np.full(1000, 170.0), 0.2)
    unused = replace(loiter(10.0, 70.0, 2.0), used=False)
    assert gather_blocks(series, [unused]) is None
    assert gather_blocks(series, [loiter(500.0, 600.0, 2.0)]) is None

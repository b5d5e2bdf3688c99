"""A seeded small part of `python -m tests.fleet_campaign`, which is the whole.

Limits are binomial: a program whose figures meet their aims would fail here with a chance below 1e-5 in all.
"""

import numpy as np
import pytest
from scipy import stats

from service.fleet.changes import FALSE_ALARM_RATE
from tests.fleet_campaign import Cell, Marks, first_row, run_cell, second_row

FLEETS = 120
CELLS = [(3, 0.0), (3, 0.015), (10, 0.0), (10, 0.005), (10, 0.015)]
CHANCE = 1e-5 / (len(CELLS) * 12)


@pytest.fixture(scope="module", params=CELLS, ids=str)
def cell(request: pytest.FixtureRequest) -> Cell:
    return run_cell(*request.param, fleets=FLEETS, seed=7)


def fewest(share: float) -> float:
    """Share of the fleets that chance does not go below where so many are right."""
    return float(stats.binom.ppf(CHANCE, FLEETS, share)) / FLEETS


def most(share: float) -> float:
    return float(stats.binom.isf(CHANCE, FLEETS, share)) / FLEETS


def test_intervals_hold(cell: Cell) -> None:
    assert cell.mean.pooled_holds >= fewest(0.92)
    assert cell.mean.next_holds >= fewest(0.92)
    assert cell.mean.bad_holds >= fewest(0.90)


def test_false_alarms(cell: Cell) -> None:
    assert cell.mean.newest_alarm <= most(FALSE_ALARM_RATE)
    assert cell.mean.drift_alarm <= most(FALSE_ALARM_RATE)
    assert cell.mean.apart <= most(0.01)
    assert cell.mean.checks <= most(0.03)


@pytest.mark.parametrize(
    ("flights", "deviation", "least"),
    # shares that 2000 fleets of the campaign showed, rounded down
    [(5, 0.0, 0.85), (10, 0.0, 0.96), (10, 0.005, 0.85)],
)
def test_a_step_of_four_per_cent_is_found(flights: int, deviation: float, least: float) -> None:
    assert run_cell(flights, deviation, FLEETS, seed=8).mean.large_step >= fewest(least)


def test_a_drift_over_thirty_flights_is_found() -> None:
    assert run_cell(30, 0.005, 20, seed=9).mean.drift_found >= float(stats.binom.ppf(CHANCE, 20, 0.98)) / 20


def test_a_cell_is_the_same_every_time() -> None:
    assert run_cell(3, 0.005, 3, seed=1) == run_cell(3, 0.005, 3, seed=1)


def test_marks_and_rows() -> None:
    cell = run_cell(3, 0.0, 5, seed=1)
    marks = Marks(6)
    big = Cell(10, 0.0, 2000, cell.mean)
    assert [marks.coverage(big, share) for share in (0.88, 0.95, 1.0)] == ["<", " ", ">"]
    assert marks.coverage(Cell(2, 0.0, 2000, cell.mean), 1.0) == " "
    assert [marks.alarm(big, share, 0.01) for share in (0.01, 0.03, np.nan)] == [" ", ">", " "]
    assert first_row(cell, marks).split()[:2] == ["3", "0.0"]
    assert second_row(run_cell(1, 0.0, 2, seed=1), marks).split()[-1] == "-"

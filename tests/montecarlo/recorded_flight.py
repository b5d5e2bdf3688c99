"""A recorded flight of three circles, each of them reduced alone: do they tell of one scale?

The uncertainty of one circle holds what is common to all (zero offset, density), so their scatter about the weighted
mean may stay below what chi-square allows; above it they contradict one another.
"""

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
from scipy import stats

from service.domain.log import DecodedLog
from service.domain.results import Estimate, Loiter, Reduction
from service.domain.settings import Settings, Window
from service.pipeline import reduce_flight
from service.readers.registry import read_log
from tests.montecarlo.worked_sets import interval

FLIGHT = Path(__file__).parents[3] / "shared" / "logs" / "dawn" / "flight3" / "flight.ulg"
CONSISTENT = 0.05
"""Chance of the scatter above which the circles are called consistent."""


def recorded_flight_rows() -> list[str]:
    """The whole flight, each circle alone, and their agreement; one line where the log is not at hand."""
    if not FLIGHT.is_file():
        return ["recorded flight: no log at hand"]
    log = read_log(FLIGHT, sha256="").log
    whole = reduce_flight(log, Settings())
    alone = [_alone(log, loiter) for loiter in whole.loiters if loiter.used]
    scales = [s for s in (reduction.calibration.speed_scale for reduction in alone) if s is not None]
    rows = [f"recorded flight of three circles (verdict expected: doubtful)\n  whole flight: {_told(whole)}"]
    rows += [
        f"  {loiter.turns * 360:.0f} degrees {loiter.direction} alone: {_told(reduction)}"
        for loiter, reduction in zip((loiter for loiter in whole.loiters if loiter.used), alone, strict=True)
    ]
    return [*rows, f"  {_agreement(scales)}"]


def _alone(log: DecodedLog, loiter: Loiter) -> Reduction:
    return reduce_flight(log, replace(Settings(), loiters=(Window(loiter.start_s, loiter.end_s),)))


def _told(reduction: Reduction) -> str:
    calibration, reasons = reduction.calibration, [str(reason.code) for reason in reduction.calibration.reasons]
    if calibration.speed_scale is None or reduction.wind is None:
        return f"{calibration.verdict} {reasons}"
    wind = reduction.wind
    return (
        f"{calibration.verdict}; speed scale {interval(calibration.speed_scale)}; "
        f"wind north {wind.north_mps.value:+.2f}, east {wind.east_mps.value:+.2f} m/s; {', '.join(reasons)}"
    )


def scatter(scales: Sequence[Estimate]) -> tuple[float, float]:
    """Chi-square of the scales about their weighted mean, and the chance of as much."""
    values = np.array([scale.value for scale in scales])
    weights = np.array([scale.standard_uncertainty for scale in scales]) ** -2.0
    mean = float(weights @ values / weights.sum())
    chi_square = float(weights @ (values - mean) ** 2)
    return chi_square, float(stats.chi2.sf(chi_square, values.size - 1))


def _agreement(scales: Sequence[Estimate]) -> str:
    if len(scales) < 2:
        return "circles: too few answered to compare"
    chi_square, chance = scatter(scales)
    told = "consistent" if chance > CONSISTENT else "NOT consistent"
    return (
        f"circles: chi-square {chi_square:.2f} with {len(scales) - 1} degrees of freedom, chance {chance:.2f}: {told}"
    )

"""Numbers that no flight holds: the search for faults neither raises, nor warns, nor answers with nonsense spans."""

from dataclasses import dataclass, field

import numpy as np
import pytest

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import Direction, ZeroOffsetSource
from service.domain.log import ReadingGap, StaticSamples
from service.domain.results import AirDataSeries, Estimate, FittedPoints, Loiter
from service.reduction.faults import find_faults, find_scale_step
from tests.unit.reduction.constructed import series_of

SIZES = (0, 1, 2, 3, 7, 60, 400, 2000)


def times(rng: np.random.Generator, count: int) -> FloatArray:
    """Increasing: steady, jittering, with gaps of months, or over ages."""
    steps = (
        np.full(count, 0.1),
        np.full(count, 1.0),
        rng.exponential(1.0, count) + 1e-6,
        10.0 ** rng.uniform(-6.0, 9.0, count),
        np.where(rng.random(count) < 0.05, 1e7, 0.1),
    )
    return np.asarray(np.cumsum(steps[rng.integers(len(steps))]) + rng.choice([0.0, -1e6, 1e9]))


def values(rng: np.random.Generator, count: int) -> FloatArray:
    """Plausible, constant, rounded, wandering, spiky, huge or tiny, some or all of them missing."""
    kinds = (
        rng.normal(100.0, 5.0, count),
        np.full(count, rng.choice([0.0, 1e300, -5.0])),
        rng.normal(0.0, 1e150, count),
        rng.choice([0.0, 1.0, 1e308, -1e308], count),
        np.round(rng.normal(100.0, 3.0, count)),
        rng.normal(0.0, 1e-300, count),
        np.cumsum(rng.normal(0.0, 1.0, count)),
        np.where(rng.random(count) < 0.02, 1e6, rng.normal(100.0, 5.0, count)),
        np.where(rng.random(count) < 0.5, 170.0, rng.normal(170.0, 3.0, count)),
    )
    missing = rng.random(count) < rng.choice([0.0, 0.0, 0.1, 0.9, 1.0])
    return np.where(missing, np.nan, kinds[rng.integers(len(kinds))])


def mask(rng: np.random.Generator, count: int) -> BoolArray:
    return np.asarray(rng.random(count) < rng.choice([0.0, 0.3, 1.0]))


def hostile_series(rng: np.random.Generator) -> AirDataSeries:
    count, gps_count = (int(rng.choice(SIZES)) for _ in range(2))
    return series_of(
        values(rng, count),
        time_s=times(rng, count),
        static_pressure_pa=np.abs(np.nan_to_num(values(rng, count))),
        altitude_m=values(rng, count),
        on_ground=mask(rng, count),
        at_rest=mask(rng, count),
        gps_time_s=times(rng, gps_count),
        velocity_north_mps=np.nan_to_num(values(rng, gps_count)),
        velocity_east_mps=np.nan_to_num(values(rng, gps_count)),
        velocity_down_mps=np.zeros(gps_count),
        gps_altitude_m=values(rng, gps_count),
        gps_on_ground=mask(rng, gps_count),
        compensated_zero=bool(rng.integers(2)),
        standard_static=bool(rng.integers(2)),
    )


@pytest.mark.parametrize("seed", range(8))
def test_hostile_series(seed: int) -> None:
    rng = np.random.default_rng(seed)
    for _ in range(40):
        series, count = hostile_series(rng), int(rng.choice(SIZES))
        static = StaticSamples(times(rng, count), values(rng, count), "static") if rng.random() < 0.7 else None
        gaps = tuple(ReadingGap(start, start + abs(length)) for start, length in rng.normal(0.0, 1e3, (2, 2)).tolist())
        full_scale = [None, 0.0, 100.0, 1e308][rng.integers(4)]
        report = find_faults(series, log_gaps=gaps, full_scale_pa=full_scale, static=static)
        assert report.probe_faulty.shape == report.static_faulty.shape == series.time_s.shape
        assert report.probe_faulty[np.isnan(series.reading_pa)].all()
        assert all(np.isfinite([f.start_s, f.end_s]).all() and f.start_s <= f.end_s for f in report.faults)


@dataclass(frozen=True)
class Fit:
    zero_offset_pa: float
    pressure_scale: float = 1.0
    covariance: FloatArray = field(default_factory=lambda: np.diag([1e-4, 1.0]))
    zero_offset_source: ZeroOffsetSource = ZeroOffsetSource.FITTED
    gps_delay_s: Estimate | None = None


def hostile_points(rng: np.random.Generator, loiters: int) -> FittedPoints:
    count = int(rng.choice([23, 24, 30, 159, 161, 320]))
    speeds = (np.full(count, 17.0), np.abs(rng.normal(17.0, 3.0, count)), np.full(count, 1e-9), np.zeros(count))
    speed = speeds[rng.integers(len(speeds))]
    headings = (np.zeros(count), rng.uniform(0.0, 360.0, count), np.mod(11.0 * np.arange(count), 360.0))
    return FittedPoints(
        time_s=np.cumsum(rng.choice([0.001, 1.6, 300.0], count)),
        loiter=np.sort(rng.integers(0, loiters, count)).astype(np.float64),
        heading_deg=headings[rng.integers(len(headings))],
        probe_true_airspeed_mps=speed * rng.choice([0.0, 0.9, 1.0, 3.0]),
        wind_corrected_speed_mps=speed,
    )


@pytest.mark.parametrize("seed", range(4))
def test_hostile_points(seed: int) -> None:
    rng = np.random.default_rng(seed)
    for _ in range(8):
        loiters = tuple(Loiter(0.0, 1e3, 3.0, Direction.LEFT, 360.0, 17.0, True) for _ in range(rng.integers(1, 6)))
        readings = series_of(rng.normal(100.0, rng.choice([0.0, 5.0, 200.0]), int(rng.choice(SIZES))))
        fit = Fit(float(rng.normal(0.0, 100.0)))
        fault = find_scale_step(hostile_points(rng, len(loiters)), loiters, fit, series=readings)
        assert fault is None or np.isfinite([fault.start_s, fault.end_s]).all()

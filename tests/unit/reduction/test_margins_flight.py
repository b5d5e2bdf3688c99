"""From readings to warnings on constructed flights: what a probe that reads high would have hidden."""

from dataclasses import dataclass, replace

import numpy as np
import pytest

from service.airdata.pitot import impact_pressure_from_calibrated_airspeed
from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import Flag, Level
from service.domain.log import LoadFactorSamples
from service.domain.results import AirDataSeries, FitResult, StallMargins, StallWarning
from service.domain.settings import Aircraft, Configuration, ConfigurationTime, ProbeSettings, WarningSettings
from service.reduction.configuration import configuration_in_force
from service.reduction.correction import corrected_series
from service.reduction.load_factor import load_factor_at
from service.reduction.margins import stall_margins
from service.reduction.stall_warnings import stall_warnings
from tests.unit.reduction.constructed import fit_of, series_of

SCALE, OFFSET_PA, NOISE_PA = 0.884, 115.0, 0.5
COVARIANCE = np.array([[0.02**2, -0.5 * 0.02 * 0.8], [-0.5 * 0.02 * 0.8, 0.8**2]])
CRAFT = Aircraft(
    reference_mass_kg=6.0,
    mass_kg=6.4,
    mass_uncertainty_kg=0.1,
    configurations=(Configuration("clean", 11.2, 0.3), Configuration("flaps", 9.6, 0.3)),
)
CHANGES = (ConfigurationTime(140.0, "flaps"),)


@dataclass(frozen=True)
class Flight:
    """Ten seconds at rest, then 190 s aloft that slow to 12.5 m/s about t = 100 s, with a 1 s pull to 1.9 g at 60 s."""

    time_s: FloatArray
    airspeed_mps: FloatArray
    load_factor: FloatArray
    on_ground: BoolArray


def flight() -> Flight:
    time_s = np.arange(0.0, 200.0, 0.05)
    on_ground = time_s < 10.0
    airspeed = 18.0 - 5.5 * np.exp(-(((time_s - 100.0) / 12.0) ** 2))
    pull = np.where(np.abs(time_s - 60.0) < 0.5, 0.9 * np.cos(np.pi * (time_s - 60.0)), 0.0)
    return Flight(time_s, np.where(on_ground, 1.5, airspeed), 1.0 + pull, on_ground)


def recorded(truth: Flight, seed: int, scale: float = SCALE, offset_pa: float = OFFSET_PA) -> AirDataSeries:
    noise = NOISE_PA * np.random.default_rng(seed).standard_normal(truth.time_s.size)
    readings = impact_pressure_from_calibrated_airspeed(truth.airspeed_mps) / scale + offset_pa + noise
    return series_of(readings, 0.05, on_ground=truth.on_ground)


def reduced(
    series: AirDataSeries, fit: FitResult | None, load_factor: FloatArray
) -> tuple[StallMargins, tuple[StallWarning, ...]]:
    in_force = configuration_in_force(series.time_s, CRAFT.configurations, CHANGES)
    corrected = corrected_series(series, fit, ProbeSettings(), np.zeros(series.time_s.size, dtype=bool), OFFSET_PA)
    load = load_factor_at(series, LoadFactorSamples(series.time_s, load_factor, "accelerometer"), None)
    margins, _ = stall_margins(corrected, load, CRAFT, in_force)
    assert margins is not None
    return stall_warnings(margins, in_force, CRAFT, WarningSettings())


def true_margin(truth: Flight, stall_mps: tuple[float, float] = (11.2, 9.6), mass_kg: float = 6.4) -> FloatArray:
    stall = np.where(truth.time_s < 140.0, *stall_mps) * np.sqrt(truth.load_factor * mass_kg / 6.0)
    margin: FloatArray = truth.airspeed_mps / stall - 1.0
    return margin


FIT = fit_of(SCALE, OFFSET_PA, COVARIANCE, (15.0, 18.5))


def test_margins_follow_the_truth_through_slow_flight_a_pull_up_and_a_change_of_flaps() -> None:
    truth = flight()
    margins, _ = reduced(recorded(truth, 1), FIT, truth.load_factor)
    aloft = ~truth.on_ground
    error = (margins.margin - true_margin(truth))[aloft]
    assert np.sqrt(np.mean(error**2)) < 0.004
    kinks = np.abs(np.abs(truth.time_s - 60.0) - 0.5)[aloft] < 0.25  # the filter rounds where the pull sets in and ends
    assert np.abs(error[~kinks]).max() < 0.02
    assert np.abs(error).max() < 0.07
    assert np.isnan(margins.margin[truth.on_ground]).all()
    assert (margins.margin_lower_95[aloft] < margins.margin[aloft] - 0.05).all()


def test_warnings_stand_where_the_truth_is_below_the_thresholds() -> None:
    truth = flight()
    _, found = reduced(recorded(truth, 2), FIT, truth.load_factor)
    margin = true_margin(truth)
    margin[truth.on_ground] = np.nan
    slow = np.flatnonzero((margin < 0.3) & (truth.time_s > 70.0))
    slower = np.flatnonzero((margin < 0.1) & (truth.time_s > 70.0))
    pulled, caution, warning = sorted(
        (each for each in found if each.end_s > 50.0), key=lambda each: (each.start_s, each.level)
    )
    assert (pulled.level, caution.level, warning.level) == (Level.CAUTION, Level.CAUTION, Level.WARNING)
    assert pulled.minimum_margin == pytest.approx(18.0 / (11.2 * np.sqrt(1.9 * 6.4 / 6.0)) - 1.0, abs=0.02)
    assert pulled.load_factor == pytest.approx(1.9, abs=0.05)
    assert [caution.start_s, caution.end_s] == pytest.approx(truth.time_s[slow[[0, -1]]], abs=1.0)
    assert [warning.start_s, warning.end_s] == pytest.approx(truth.time_s[slower[[0, -1]]], abs=1.5)
    # the probe read 6 % high: it showed a margin above the red threshold all the way
    assert warning.minimum_margin < 0.09
    assert warning.indicated_margin > 0.13
    assert min(each.start_s for each in found) >= 10.0  # silent at rest


def test_a_refused_calibration_is_silent() -> None:
    truth = flight()
    margins, found = reduced(recorded(truth, 3), None, truth.load_factor)
    assert found == ()
    assert np.isnan(margins.margin).all()
    assert np.isfinite(margins.stall_speed_mps).all()
    assert (margins.flags & Flag.UNCALIBRATED.value > 0).all()


def test_over_many_flights_one_truth_in_forty_lies_below_the_bound() -> None:
    """Each flight draws the errors of scale, zero, stall speed, mass and accelerometer that its uncertainties state."""
    rng = np.random.default_rng(20)
    at = 2000  # slowest, in the clean configuration
    inside = fit_of(SCALE, OFFSET_PA, COVARIANCE, (10.0, 20.0))
    truth = flight()
    short = slice(at - 40, at + 40)
    below = []
    for seed in range(3000):
        log_scale, offset = rng.multivariate_normal([0.0, 0.0], COVARIANCE)
        # flown with the probe as it is; the fit holds FIT's numbers, off by the drawn errors
        series = recorded(truth, seed, SCALE * np.exp(log_scale), OFFSET_PA + offset)
        cut = replace(
            series_of(series.reading_pa[short], 0.05),
            gps_time_s=np.empty(0),
            velocity_north_mps=np.empty(0),
            velocity_east_mps=np.empty(0),
            velocity_down_mps=np.empty(0),
        )
        load = truth.load_factor[short] + 0.03 * rng.standard_normal()
        margins, _ = reduced(cut, inside, load)
        stall, mass = 11.2 + 0.3 * rng.standard_normal(), 6.4 + 0.1 * rng.standard_normal()
        below.append(true_margin(truth, (stall, stall), mass)[at] < margins.margin_lower_95[40])
    assert np.mean(below) == pytest.approx(0.025, abs=0.0085)  # three standard deviations of 3000 draws

"""The robust start of the fit, and the fit's own promises on constructed circles."""

from dataclasses import replace

import numpy as np
import pytest

from service.domain.codes import Reason, ZeroOffsetSource
from service.domain.results import AirDataSeries, FitResult, ReasonGiven
from service.reduction.fit import DelayPrior, OffsetPrior, PreliminaryFit, fit_scale_and_wind, preliminary_fit
from service.reduction.loiters import find_loiters
from service.reduction.series import build_series
from tests.unit.flown_circles import Flown, log_of
from tests.unit.reduction.circling import WIND_EAST_MPS, WIND_NORTH_MPS, circling

NO_ZERO = OffsetPrior(0.0, 0.05)
DELAY = DelayPrior(0.25, 0.13)


def series_flown(flown: Flown) -> AirDataSeries:
    log, nowhere = log_of(flown), np.empty((0, 2))
    assert log.probe is not None
    return build_series(log, log.probe, nowhere, nowhere)


def started(series: AirDataSeries, offset: OffsetPrior = NO_ZERO) -> PreliminaryFit:
    usable = np.isfinite(series.reading_pa)
    first = preliminary_fit(series, usable, find_loiters(series), offset, DELAY)
    assert isinstance(first, PreliminaryFit), first
    return first


def fitted(series: AirDataSeries, offset: OffsetPrior = NO_ZERO) -> FitResult:
    first = started(series, offset)
    return fit_scale_and_wind(series, find_loiters(series), first, offset, ZeroOffsetSource.GIVEN, DELAY)


@pytest.mark.parametrize("pressure_scale", [0.05, 0.3, 1.0, 4.0])
def test_the_start_is_near_whatever_the_scale(pressure_scale: float) -> None:
    state = started(series_flown(Flown(pressure_scale=pressure_scale))).state
    assert np.exp(state.log_scale) == pytest.approx(pressure_scale, rel=0.01)
    assert state.wind_mps[0] == pytest.approx([3.0, -4.0], abs=0.05)


def test_the_start_finds_a_large_zero_from_two_speeds() -> None:
    flown = Flown(turns=12, zero_offset_pa=90.0, airspeed_mps=14.5, second_airspeed_mps=22.0)
    state = started(series_flown(flown), OffsetPrior(45.0, 50.0)).state
    assert state.zero_offset_pa == pytest.approx(90.0, abs=2.0)
    assert np.exp(state.log_scale) == pytest.approx(1.1, rel=0.02)


def test_outliers_of_the_gps_are_dropped() -> None:
    series = series_flown(Flown())
    series.velocity_north_mps[::41] += 30.0
    first = started(series)
    assert first.blocks.time_s.size < series.gps_time_s.size - series.gps_time_s.size // 41 + 5
    assert first.state.wind_mps[0] == pytest.approx([3.0, -4.0], abs=0.05)


def test_turns_are_counted_on() -> None:
    first = started(series_flown(Flown(turns=4)))
    numbers = first.turn_numbers()
    assert numbers.shape == first.blocks.time_s.shape
    assert np.unique(numbers).size == pytest.approx(4, abs=1)
    assert first.air_heading_rad().shape == numbers.shape


def test_probe_and_gps_that_never_meet() -> None:
    series = series_flown(Flown())
    reason = preliminary_fit(series, np.zeros(series.time_s.size, dtype=bool), find_loiters(series), NO_ZERO, DELAY)
    assert isinstance(reason, ReasonGiven)
    assert reason.code is Reason.TOO_FEW_SAMPLES


def test_readings_below_zero_have_no_start() -> None:
    series = series_flown(Flown())
    swapped = replace(series, reading_pa=-series.reading_pa)
    reason = preliminary_fit(
        swapped, np.ones(series.time_s.size, dtype=bool), find_loiters(series), OffsetPrior(0.0, 0.05), DELAY
    )
    assert isinstance(reason, ReasonGiven)
    assert reason.code is Reason.PROBE_FAULT


def test_gusts_widen_the_interval_far_beyond_the_textbook() -> None:
    calm, gusty = (fitted(circling(gust_mps=gust).series) for gust in (0.05, 0.6))
    deviation = float(np.sqrt(gusty.covariance[0, 0]))
    assert deviation > 2.0 * np.sqrt(calm.covariance[0, 0] - calm.log_density_uncertainty**2)
    # white residuals of the same size would leave 2 rms / (V sqrt(samples))
    textbook = 2.0 * gusty.residual_rms_mps / (17.0 * np.sqrt(gusty.points.time_s.size))
    assert np.sqrt(deviation**2 - gusty.log_density_uncertainty**2) > 1.5 * textbook


@pytest.mark.parametrize("seed", range(4))
def test_the_truth_lies_within_reach_in_gusts(seed: int) -> None:
    fit = fitted(circling(seed, gust_mps=0.4, pressure_scale=1.2).series)
    assert abs(np.log(fit.pressure_scale / 1.2)) < 4.5 * np.sqrt(fit.covariance[0, 0])
    assert abs(fit.wind.north_mps.value - WIND_NORTH_MPS) < 4.5 * fit.wind.north_mps.standard_uncertainty
    assert abs(fit.wind.east_mps.value - WIND_EAST_MPS) < 4.5 * fit.wind.east_mps.standard_uncertainty
    assert 0.1 < fit.gust_mps < 1.5
    assert fit.coverage_factor_95 > 1.9


def test_density_is_paid_for_in_the_scale_alone() -> None:
    series = series_flown(Flown())
    sure = fitted(replace(series, temperature_uncertainty_k=0.0, static_uncertainty_pa=0.0))
    unsure = fitted(replace(series, temperature_uncertainty_k=10.0))
    assert sure.log_density_uncertainty == pytest.approx(0.0, abs=1e-9)
    assert unsure.log_density_uncertainty == pytest.approx(10.0 / 287.4, rel=0.01)
    assert unsure.covariance[0, 0] - sure.covariance[0, 0] == pytest.approx((10.0 / 287.4) ** 2, rel=0.02)
    assert unsure.wind.north_mps.standard_uncertainty == pytest.approx(sure.wind.north_mps.standard_uncertainty)

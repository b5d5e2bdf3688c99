"""Corrected series: airspeeds against the check values, uncertainty against Monte Carlo, every flag."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.airdata.pitot import (
    calibrated_airspeed_from_impact_pressure,
    impact_pressure_from_calibrated_airspeed,
    true_airspeed_from_impact_pressure,
)
from service.domain.codes import Flag
from service.domain.results import AirDataSeries, CorrectedSeries, FitResult
from service.domain.settings import ProbeSettings
from service.reduction.correction import corrected_series, reading_noise
from tests.unit.reduction.constructed import fit_of, series_of

PLAIN = ProbeSettings()


def corrected(
    series: AirDataSeries, fit: FitResult | None, probe: ProbeSettings = PLAIN, zero_offset_pa: float = 0.0
) -> CorrectedSeries:
    return corrected_series(series, fit, probe, np.zeros(series.time_s.size, dtype=bool), zero_offset_pa)


# --- airspeeds --------------------------------------------------------------------------------------------------------


def test_impact_pressures_of_the_check_values_give_their_airspeeds() -> None:
    # check values b2, inverse points [exact]
    answer = corrected(series_of([250.0, 500.0, 1250.0, 1500.0, 6894.757]), fit_of())
    assert answer.calibrated_mps == pytest.approx([20.194, 28.546, 45.076, 49.357, 104.849], abs=5e-4)
    assert answer.indicated_mps == pytest.approx(answer.calibrated_mps, rel=1e-15)
    assert answer.true_mps == pytest.approx(answer.calibrated_mps, rel=1e-12)  # sea level, standard air
    assert answer.equivalent_mps == pytest.approx(answer.calibrated_mps, rel=1e-12)


def test_a_probe_that_reads_high_is_brought_down_and_its_offset_taken_off() -> None:
    truth_pa = impact_pressure_from_calibrated_airspeed(np.array([12.0, 18.0, 25.0]))
    answer = corrected(series_of(truth_pa / 0.884 + 115.0), fit_of(0.884, 115.0))
    assert answer.calibrated_mps == pytest.approx([12.0, 18.0, 25.0], rel=1e-12)
    assert answer.indicated_mps == pytest.approx(np.array([12.0, 18.0, 25.0]) / np.sqrt(0.884), rel=2e-4)


def test_indicated_airspeed_takes_the_nominal_scale_of_a_venturi() -> None:
    truth_pa = impact_pressure_from_calibrated_airspeed(np.array([15.0]))
    answer = corrected(series_of(truth_pa / 0.25), fit_of(0.25), ProbeSettings(nominal_pressure_scale=0.2))
    assert answer.calibrated_mps == pytest.approx([15.0], rel=1e-12)
    assert answer.indicated_mps == pytest.approx([15.0 * np.sqrt(0.8)], rel=1e-4)


def test_true_airspeed_takes_static_pressure_and_temperature_at_altitude() -> None:
    series = series_of([500.0], static_pressure_pa=np.array([79495.0]), air_temperature_k=np.array([285.15]))
    answer = corrected(series, fit_of())
    density = 79495.0 / (287.05287 * 285.15)
    compressed = 1.0 - 500.0 / (1.4 * 79495.0 / 2.0) / 8.0  # 1 - M^2 / 8, the next term of the series
    assert answer.true_mps == pytest.approx([np.sqrt(1000.0 / density) * compressed], rel=1e-5)
    assert answer.equivalent_mps == pytest.approx([np.sqrt(1000.0 / 1.225) * compressed], rel=1e-5)
    assert answer.calibrated_mps[0] > answer.equivalent_mps[0]


def test_without_a_fit_nothing_is_corrected_and_nothing_is_claimed() -> None:
    series = series_of([250.0, 301.0])
    answer = corrected(series, None, ProbeSettings(nominal_pressure_scale=0.5), zero_offset_pa=1.0)
    assert answer.calibrated_mps == pytest.approx(calibrated_airspeed_from_impact_pressure([124.5, 150.0]))
    assert answer.indicated_mps == pytest.approx(answer.calibrated_mps)
    assert np.isnan(answer.calibrated_standard_uncertainty_mps).all()
    assert np.isnan(answer.true_standard_uncertainty_mps).all()
    assert answer.flags.tolist() == [Flag.UNCALIBRATED] * 2


# --- flags ------------------------------------------------------------------------------------------------------------


def test_every_flag_is_raised_for_its_own_samples_only() -> None:
    reading = np.array([250.0, np.nan, -5.0, 50.0, 250.0, 250.0, 9e5])
    series = series_of(reading, on_ground=np.arange(7) == 5, standard_static=True, standard_temperature=True)
    answer = corrected_series(series, fit_of(), PLAIN, np.arange(7) == 4, 0.0)
    both = Flag.STANDARD_STATIC | Flag.STANDARD_TEMPERATURE
    assert [Flag(int(mask)) ^ both for mask in answer.flags] == [
        Flag(0),
        Flag.MISSING,
        Flag.BELOW_ZERO | Flag.EXTRAPOLATED,
        Flag.EXTRAPOLATED,
        Flag.FAULTY,
        Flag.ON_GROUND,
        Flag.FAULTY,  # beyond Mach 1: no reading of ours
    ]


def test_values_of_missing_negative_and_faulty_samples() -> None:
    series = series_of([250.0, np.nan, -5.0, 250.0])
    answer = corrected_series(series, fit_of(covariance=[[1e-4, 0], [0, 1]]), PLAIN, np.arange(4) == 3, 0.0)
    assert np.isnan(answer.calibrated_mps).tolist() == [False, True, False, False]
    assert answer.indicated_mps[2] == answer.calibrated_mps[2] == answer.true_mps[2] == 0.0
    assert np.isnan(answer.calibrated_standard_uncertainty_mps).tolist() == [False, True, False, True]
    assert np.isnan(answer.true_standard_uncertainty_mps).tolist() == [False, True, False, True]


def test_a_negative_pressure_is_known_to_be_slow_but_not_to_be_zero() -> None:
    answer = corrected(series_of([-0.5]), fit_of(covariance=[[0, 0], [0, 1.0]]))
    assert 0.5 < answer.calibrated_standard_uncertainty_mps[0] < calibrated_airspeed_from_impact_pressure(1.0)


# --- uncertainty ------------------------------------------------------------------------------------------------------


def test_uncertainty_in_the_flown_range_is_what_monte_carlo_finds() -> None:
    # K is found by a GPS airspeed and an assumed density: ln K = ln K(true density) - error of ln density
    scale, offset, reading, temperature = 0.9, 5.0, 260.0, 280.0
    by_gps, density = np.array([[4e-4, -0.012], [-0.012, 1.0]]), 10.0 / temperature
    covariance = by_gps + np.diag([density**2, 0.0])
    series = series_of(
        [reading],
        static_pressure_pa=np.array([90000.0]),
        air_temperature_k=np.array([temperature]),
        temperature_uncertainty_k=10.0,
    )
    answer = corrected(series, fit_of(scale, offset, covariance, log_density_uncertainty=density))
    rng = np.random.default_rng(7)
    log_scale, offsets = rng.multivariate_normal([np.log(scale), offset], by_gps, 200_000).T
    warmer = 1.0 + density * rng.standard_normal(200_000)
    impact = np.exp(log_scale) / warmer * (reading - offsets)
    cas = calibrated_airspeed_from_impact_pressure(impact)
    tas = true_airspeed_from_impact_pressure(impact, 90000.0, temperature * warmer)
    assert answer.calibrated_standard_uncertainty_mps[0] == pytest.approx(cas.std(), rel=0.01)
    assert answer.true_standard_uncertainty_mps[0] == pytest.approx(tas.std(), rel=0.01)


def test_at_zero_pressure_the_uncertainty_is_the_root_mean_square_of_airspeed() -> None:
    u_pa = 2.0
    answer = corrected(series_of([0.0]), fit_of(covariance=[[0, 0], [0, u_pa**2]]))
    pressure = np.abs(u_pa * np.random.default_rng(3).standard_normal(400_000))
    rms = np.sqrt(np.mean(calibrated_airspeed_from_impact_pressure(pressure) ** 2))
    assert answer.calibrated_standard_uncertainty_mps[0] == pytest.approx(rms, rel=0.01)


@given(
    reading_pa=st.floats(-500.0, 4000.0),
    log_scale_uncertainty=st.floats(0.0, 0.2),
    offset_uncertainty_pa=st.floats(0.0, 40.0),
    correlation=st.floats(-1.0, 1.0),
)
def test_uncertainty_is_finite_and_bounded_at_any_pressure(
    reading_pa: float, log_scale_uncertainty: float, offset_uncertainty_pa: float, correlation: float
) -> None:
    mixed = correlation * log_scale_uncertainty * offset_uncertainty_pa
    fit = fit_of(covariance=[[log_scale_uncertainty**2, mixed], [mixed, offset_uncertainty_pa**2]])
    answer = corrected(series_of([reading_pa]), fit)
    uncertainty = float(answer.calibrated_standard_uncertainty_mps[0])
    # never more than the airspeed of the pressure's own uncertainty, extrapolation included
    pressure = max(reading_pa, 0.0) * (log_scale_uncertainty + 2.0) + offset_uncertainty_pa
    assert 0.0 <= uncertainty <= calibrated_airspeed_from_impact_pressure(pressure) + 1e-12


def test_uncertainty_grows_steadily_outside_the_flown_speeds() -> None:
    speeds = np.array([15.0, 14.9, 13.0, 11.0, 9.0])
    readings = impact_pressure_from_calibrated_airspeed(speeds)
    answer = corrected(series_of(readings), fit_of(covariance=[[9e-4, 0], [0, 0]], airspeed_range_mps=(15.0, 20.0)))
    uncertainty = answer.calibrated_standard_uncertainty_mps
    assert uncertainty[0] == pytest.approx(0.5 * 0.03 * 15.0, rel=1e-3)
    assert (np.diff(uncertainty[:4]) > 0.0).all()
    assert (np.diff(uncertainty / speeds) > 0.0).all()
    # the rule: 5 % of impact pressure, 2.5 % of speed, at 1 / 1.6 of the slowest flown
    slow = impact_pressure_from_calibrated_airspeed(np.array([15.0 / 1.6, 20.0 * 1.6]))
    alone = corrected(series_of(slow), fit_of(airspeed_range_mps=(15.0, 20.0)))
    assert alone.calibrated_standard_uncertainty_mps / alone.calibrated_mps == pytest.approx([0.025, 0.025], rel=0.01)


def test_flown_edges_themselves_are_not_extrapolated() -> None:
    edges = impact_pressure_from_calibrated_airspeed(np.array([14.999, 15.001, 19.999, 20.001]))
    answer = corrected(series_of(edges), fit_of(airspeed_range_mps=(15.0, 20.0)))
    assert (answer.flags & np.uint32(Flag.EXTRAPOLATED) > 0).tolist() == [True, False, False, True]


def test_the_sensors_noise_enters_through_the_scale() -> None:
    rng = np.random.default_rng(5)
    readings = 250.0 + 2.0 * rng.standard_normal(4000)
    answer = corrected(series_of(readings), fit_of(0.5, airspeed_range_mps=(1.0, 50.0)))
    expected = 0.5 * 2.0 / (1.225 * answer.calibrated_mps)
    assert answer.calibrated_standard_uncertainty_mps == pytest.approx(expected, rel=0.05)


def test_noise_on_the_ground_and_in_faults_is_not_the_flights() -> None:
    rng = np.random.default_rng(6)
    noise = rng.standard_normal(3000)
    noise[:1000] *= 50.0
    noise[1000:2000] *= 30.0
    series = series_of(250.0 + noise, on_ground=np.arange(3000) < 1000)
    faulty = (np.arange(3000) >= 1000) & (np.arange(3000) < 2000)
    answer = corrected_series(series, fit_of(), PLAIN, faulty, 0.0)
    assert answer.calibrated_standard_uncertainty_mps[-1] == pytest.approx(1.0 / (1.225 * 20.2), rel=0.1)


# --- the noise of the readings ----------------------------------------------------------------------------------------


def test_white_noise_on_a_smooth_flight_is_found() -> None:
    rng = np.random.default_rng(1)
    time_s = np.arange(0.0, 200.0, 0.05)
    readings = 200.0 + 60.0 * np.sin(time_s / 2.0) + 1.5 * rng.standard_normal(time_s.size)
    assert reading_noise(readings, 0.05) == pytest.approx(1.5, rel=0.05)


def test_spikes_do_not_raise_it() -> None:
    rng = np.random.default_rng(2)
    readings = 200.0 + rng.standard_normal(4000)
    readings[::100] += 500.0
    assert reading_noise(readings, 0.05) == pytest.approx(1.0, rel=0.1)


def test_values_that_a_recorder_repeats_do_not_lower_it() -> None:
    rng = np.random.default_rng(4)
    readings = np.repeat(200.0 + rng.standard_normal(4000), 5)
    assert reading_noise(readings, 0.02) == pytest.approx(1.0, rel=0.05)


def test_at_one_hertz_the_airs_own_changes_are_not_taken_for_noise() -> None:
    rng = np.random.default_rng(8)
    # a process whose squared difference grows with the lag to the power 2/3 near zero lag, made in frequency
    n = 2**15
    frequency = np.fft.rfftfreq(n)
    spectrum = (frequency**2 + 0.01**2) ** (-5.0 / 6.0)
    phases = rng.standard_normal(frequency.size) + 1j * rng.standard_normal(frequency.size)
    gust = np.fft.irfft(np.sqrt(spectrum) * phases, n)
    gust *= 18.0 / gust.std()
    assert np.diff(gust).std() > 5.0
    assert reading_noise(gust + 250.0, 1.0) < 0.35 * np.diff(gust).std()
    noisy = gust + 250.0 + 8.0 * rng.standard_normal(n)
    assert reading_noise(noisy, 1.0) == pytest.approx(8.0, rel=0.2)


@pytest.mark.parametrize("readings", [np.empty(0), np.array([1.0]), np.full(100, 3.0), np.arange(7.0)])
def test_too_little_to_tell_is_no_noise(readings: np.ndarray) -> None:
    assert reading_noise(readings, 0.1) == 0.0


# --- hostile shapes ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("fit", [None, fit_of(covariance=[[1e-4, 0], [0, 1]])])
@pytest.mark.parametrize(
    "readings", [np.empty(0), np.full(1, 200.0), np.full(50, np.nan), np.array([1e308, -1e308, 0.0, 5e-324])]
)
def test_hostile_series_keep_their_shape_and_raise_nothing(fit: FitResult | None, readings: np.ndarray) -> None:
    answer = corrected(series_of(readings), fit)
    for values in (answer.indicated_mps, answer.calibrated_mps, answer.equivalent_mps, answer.true_mps, answer.flags):
        assert values.shape == readings.shape
    assert not np.isinf(answer.calibrated_mps).any()
    assert not np.isinf(answer.calibrated_standard_uncertainty_mps).any()


def test_unknown_static_pressure_or_temperature_costs_true_airspeed_only() -> None:
    series = series_of([250.0], static_pressure_pa=np.array([np.nan]), air_temperature_k=np.array([np.nan]))
    answer = corrected(series, fit_of())
    assert np.isfinite(answer.calibrated_mps).all()
    assert np.isnan(answer.true_mps).all()

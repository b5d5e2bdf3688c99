"""Constructed inputs of the correction and margin tests: series, fits and load factors with chosen values."""

from dataclasses import replace
from typing import Any

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.codes import ZeroOffsetSource
from service.domain.results import (
    AirDataSeries,
    CorrectedSeries,
    Estimate,
    FitResult,
    FittedPoints,
    LoadFactorSeries,
    WindEstimate,
)


def series_of(reading_pa: Any, step_s: float = 0.1, **changes: Any) -> AirDataSeries:
    """A series at sea level in standard air, airborne throughout, GPS at rest, unless changed."""
    reading = np.asarray(reading_pa, dtype=np.float64)
    n = reading.size
    time_s = step_s * np.arange(n, dtype=np.float64)
    whole = AirDataSeries(
        time_s=time_s,
        reading_pa=reading,
        reordered=np.zeros(n, dtype=bool),
        static_pressure_pa=np.full(n, 101325.0),
        air_temperature_k=np.full(n, 288.15),
        temperature_uncertainty_k=0.0,
        static_uncertainty_pa=0.0,
        altitude_m=np.zeros(n),
        on_ground=np.zeros(n, dtype=bool),
        at_rest=np.zeros(n, dtype=bool),
        gps_time_s=time_s,
        velocity_north_mps=np.zeros(n),
        velocity_east_mps=np.zeros(n),
        velocity_down_mps=np.zeros(n),
        has_velocity_down=True,
        gps_altitude_m=np.zeros(n),
        gps_on_ground=np.zeros(n, dtype=bool),
        compensated_zero=True,
        standard_static=False,
        standard_temperature=False,
        probe_source="probe",
        static_source="static",
        temperature_source="temperature",
    )
    return replace(whole, **changes)


def fit_of(
    pressure_scale: float = 1.0,
    zero_offset_pa: float = 0.0,
    covariance: Any = ((0.0, 0.0), (0.0, 0.0)),
    airspeed_range_mps: tuple[float, float] = (10.0, 30.0),
    log_density_uncertainty: float = 0.0,
) -> FitResult:
    nothing = Estimate(0.0, 0.0, (0.0, 0.0))
    empty = np.empty(0)
    return FitResult(
        converged=True,
        pressure_scale=pressure_scale,
        zero_offset_pa=zero_offset_pa,
        covariance=np.array(covariance, dtype=np.float64),
        log_density_uncertainty=log_density_uncertainty,
        coverage_factor_95=1.96,
        zero_offset_source=ZeroOffsetSource.GROUND,
        gps_delay_s=None,
        wind=WindEstimate(nothing, nothing, nothing, None),
        wind_by_loiter=(),
        true_airspeed_by_loiter_mps=(),
        heading_coverage_deg=360.0,
        airspeed_range_mps=airspeed_range_mps,
        gust_mps=0.0,
        loiters_agree=1.0,
        residual_rms_mps=0.0,
        points=FittedPoints(empty, empty, empty, empty, empty),
    )


def corrected_of(calibrated_mps: Any, step_s: float = 0.1, **changes: Any) -> CorrectedSeries:
    """Calibrated airspeeds known to 0.1 m/s, indicated the same, no flags, unless changed."""
    calibrated = np.asarray(calibrated_mps, dtype=np.float64)
    n = calibrated.size
    whole = CorrectedSeries(
        time_s=step_s * np.arange(n, dtype=np.float64),
        indicated_mps=calibrated,
        calibrated_mps=calibrated,
        equivalent_mps=calibrated,
        true_mps=calibrated,
        calibrated_standard_uncertainty_mps=np.full(n, 0.1),
        true_standard_uncertainty_mps=np.full(n, 0.1),
        flags=np.zeros(n, dtype=np.uint32),
    )
    return replace(whole, **changes)


def load_factor_of(load_factor: Any, standard_uncertainty: float = 0.0) -> LoadFactorSeries:
    values: FloatArray = np.asarray(load_factor, dtype=np.float64)
    uncertainty = np.where(np.isnan(values), np.nan, standard_uncertainty)
    return LoadFactorSeries(values, uncertainty, np.zeros(values.size, dtype=bool), "accelerometer")

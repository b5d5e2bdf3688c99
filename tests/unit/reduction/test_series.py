"""Streams joined on the probe's times, and what stands in for a missing one."""

from dataclasses import replace

import numpy as np
import pytest

from service.airdata.atmosphere import standard_pressure_from_altitude
from service.domain.log import DecodedLog, StaticSamples, TemperatureSamples
from service.domain.results import AirDataSeries
from service.reduction.series import (
    MEASURED_STATIC_UNCERTAINTY_PA,
    STANDARD_STATIC_UNCERTAINTY_PA,
    STANDARD_TEMPERATURE_UNCERTAINTY_K,
    UNKNOWN_ALTITUDE_STATIC_UNCERTAINTY_PA,
    build_series,
)
from tests.unit.flown_circles import Flown, log_of

NOWHERE = np.empty((0, 2))


def built(log: DecodedLog) -> AirDataSeries:
    assert log.probe is not None
    return build_series(log, log.probe, NOWHERE, NOWHERE)


def test_everything_stands_on_the_probes_times() -> None:
    log = log_of(Flown(probe_hz=7.0))
    series = built(log)
    assert log.probe is not None
    assert series.time_s is log.probe.time_s
    for name in ("reading_pa", "static_pressure_pa", "air_temperature_k", "altitude_m", "on_ground", "at_rest"):
        assert getattr(series, name).shape == series.time_s.shape
    assert not series.standard_static
    assert not series.standard_temperature
    assert series.static_uncertainty_pa == MEASURED_STATIC_UNCERTAINTY_PA
    assert series.temperature_uncertainty_k == 0.5


def test_static_pressure_is_interpolated_over_its_gaps() -> None:
    log = log_of(Flown())
    t = np.array([0.0, 10.0, 20.0])
    series = built(replace(log, static=StaticSamples(t, np.array([90000.0, np.nan, 90200.0]), "static")))
    assert np.interp([0.0, 5.0, 10.0, 100.0], series.time_s, series.static_pressure_pa) == pytest.approx(
        [90000.0, 90050.0, 90100.0, 90200.0]
    )


def test_the_standard_atmosphere_at_the_gps_altitude_stands_in() -> None:
    series = built(log_of(Flown(altitude_m=1500.0), static=None, temperature=None))
    # standard atmosphere at 1500 m: 84555.99 Pa, 278.40 K
    assert np.median(series.static_pressure_pa) == pytest.approx(84555.994, abs=0.01)
    assert np.median(series.air_temperature_k) == pytest.approx(278.40, abs=1e-3)
    assert series.standard_static
    assert series.standard_temperature
    assert series.static_uncertainty_pa == STANDARD_STATIC_UNCERTAINTY_PA
    assert series.temperature_uncertainty_k == STANDARD_TEMPERATURE_UNCERTAINTY_K


def test_without_any_altitude_it_is_sea_level() -> None:
    log = log_of(Flown(), static=None)
    assert log.gps is not None
    series = built(replace(log, gps=replace(log.gps, altitude_m=None)))
    assert series.static_pressure_pa == pytest.approx(101325.0)
    assert series.static_uncertainty_pa == UNKNOWN_ALTITUDE_STATIC_UNCERTAINTY_PA
    assert np.isnan(series.altitude_m).all()


def test_static_pressure_tells_the_altitude_where_the_gps_does_not() -> None:
    log = log_of(Flown(altitude_m=800.0))
    assert log.gps is not None
    series = built(replace(log, gps=replace(log.gps, altitude_m=None)))
    assert np.median(series.altitude_m) == pytest.approx(800.0, abs=1.0)
    assert np.median(series.gps_altitude_m) == pytest.approx(800.0, abs=1.0)


def test_moist_air_counts_as_warmer() -> None:
    log = log_of(Flown())
    assert log.temperature is not None
    moist = replace(log.temperature, relative_humidity=np.full(log.temperature.time_s.size, 0.9))
    warmer = built(replace(log, temperature=moist)).air_temperature_k - built(log).air_temperature_k
    # near 14 degrees: saturation 1.6 kPa, virtual temperature some 1.5 K above
    assert np.median(warmer) == pytest.approx(1.5, abs=0.2)


def test_a_temperature_without_values_is_none() -> None:
    log = log_of(Flown())
    assert log.temperature is not None
    empty = TemperatureSamples(log.temperature.time_s, np.full(log.temperature.time_s.size, np.nan), None, "x", 1.0)
    assert built(replace(log, temperature=empty)).standard_temperature


def test_samples_without_a_fix_are_dropped() -> None:
    log = log_of(Flown())
    assert log.gps is not None
    north = log.gps.velocity_north_mps.copy()
    north[10:60] = np.nan
    series = built(replace(log, gps=replace(log.gps, velocity_north_mps=north)))
    assert series.gps_time_s.size == log.gps.time_s.size - 50
    assert np.isfinite(series.velocity_north_mps).all()


def test_the_climb_rate_of_static_pressure_stands_in_for_velocity_down() -> None:
    log = log_of(Flown())
    assert log.gps is not None
    assert log.static is not None
    climbing = standard_pressure_from_altitude(100.0 + 1.5 * log.static.time_s)
    blind = replace(log.gps, velocity_down_mps=None)
    series = built(replace(log, gps=blind, static=replace(log.static, static_pressure_pa=climbing)))
    assert series.has_velocity_down
    assert series.velocity_down_mps[20:-20] == pytest.approx(-1.5, abs=0.01)
    without = built(replace(log, gps=blind, static=None))
    assert not without.has_velocity_down
    assert np.all(without.velocity_down_mps == 0.0)


def test_spans_mark_the_ground() -> None:
    log = log_of(Flown())
    assert log.probe is not None
    series = build_series(log, log.probe, np.array([[0.0, 30.0]]), np.array([[5.0, 20.0]]))
    assert series.on_ground.sum() == 301
    assert series.at_rest.sum() == 151
    assert series.gps_on_ground.sum() == 151

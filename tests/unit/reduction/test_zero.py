"""Zero offset before the fit: its sources, and the wind on the ground that blows into the probe."""

import numpy as np
import pytest

from service.domain.codes import ZeroOffsetSource
from service.domain.log import AttitudeSamples
from service.domain.results import AirDataSeries
from service.domain.settings import ProbeSettings
from service.reduction.zero import (
    COMPENSATED_PRIOR_PA,
    GIVEN_PA,
    RAW_PRIOR_PA,
    READING_FLOOR_PA,
    RestReading,
    WindAloft,
    rest_readings,
    zero_offset,
)
from tests.unit.reduction.constructed import series_of

PLAIN = ProbeSettings()


def resting(zero_pa: float = 115.0, scatter_pa: float = 0.5, seconds: float = 30.0, **changes: object) -> AirDataSeries:
    count = round(10.0 * seconds)
    reading = np.random.default_rng(1).normal(zero_pa, scatter_pa, count)
    on_ground = np.ones(count, dtype=bool)
    return series_of(reading, 0.1, **({"at_rest": on_ground, "on_ground": on_ground} | changes))


def rests_of(series: AirDataSeries, attitude: AttitudeSamples | None = None) -> tuple[RestReading, ...]:
    return rest_readings(series, np.isfinite(series.reading_pa), attitude)


def test_the_mean_at_rest_with_its_scatter() -> None:
    (rest,) = rests_of(resting())
    assert rest.mean_pa == pytest.approx(115.0, abs=0.15)
    assert rest.scatter_pa == pytest.approx(0.5, rel=0.15)
    assert np.isnan(rest.heading_deg)


def test_spikes_at_rest_count_for_nothing() -> None:
    series = resting()
    series.reading_pa[::29] += 500.0
    (rest,) = rests_of(series)
    assert rest.mean_pa == pytest.approx(115.0, abs=0.15)


def test_the_heading_at_rest_is_averaged_round_the_circle() -> None:
    series = resting()
    yaw = np.where(np.arange(300) % 2 == 0, 358.0, 4.0)
    attitude = AttitudeSamples(series.time_s, np.zeros(300), np.zeros(300), yaw)
    (rest,) = rests_of(series, attitude)
    assert rest.heading_deg == pytest.approx(1.0, abs=0.01)


def test_too_few_samples_are_no_reading() -> None:
    assert rests_of(resting(seconds=0.2)) == ()
    empty = resting()
    assert rest_readings(empty, np.zeros(300, dtype=bool), None) == ()


def test_given_comes_before_ground_before_prior() -> None:
    series = resting()
    rests = rests_of(series)
    given = zero_offset(series, ProbeSettings(zero_offset_pa=7.0), rests, None)
    assert (given.value_pa, given.standard_uncertainty_pa, given.source) == (7.0, GIVEN_PA, ZeroOffsetSource.GIVEN)
    sure = zero_offset(series, ProbeSettings(zero_offset_pa=7.0, zero_offset_uncertainty_pa=0.0), rests, None)
    assert 0.0 < sure.standard_uncertainty_pa <= 1e-3
    ground = zero_offset(series, PLAIN, rests, None)
    assert ground.source is ZeroOffsetSource.GROUND
    assert ground.value_pa == pytest.approx(115.0, abs=0.15)
    assert READING_FLOOR_PA <= ground.standard_uncertainty_pa < 0.3
    prior = zero_offset(series, PLAIN, (), None)
    assert (prior.value_pa, prior.standard_uncertainty_pa, prior.source) == (
        0.0,
        COMPENSATED_PRIOR_PA,
        ZeroOffsetSource.PRIOR,
    )
    raw = zero_offset(resting(compensated_zero=False), PLAIN, (), None)
    assert (raw.value_pa, raw.standard_uncertainty_pa) == RAW_PRIOR_PA


def test_an_uncertainty_alone_widens_the_prior() -> None:
    prior = zero_offset(resting(), ProbeSettings(zero_offset_uncertainty_pa=6.0), (), None)
    assert prior.standard_uncertainty_pa == 6.0


def ground(rest: RestReading, wind: WindAloft | None) -> tuple[float, float]:
    zero = zero_offset(resting(), PLAIN, (rest,), wind)
    return zero.value_pa, zero.standard_uncertainty_pa


GUSTY = RestReading(mean_pa=105.0, scatter_pa=3.0, samples=300, heading_deg=float("nan"))


def test_wind_on_the_ground_makes_the_reading_too_high() -> None:
    value, uncertainty = ground(GUSTY, None)
    freed, wider = ground(GUSTY, WindAloft(10.0, 0.0, 100.0))
    assert freed < value
    assert wider > uncertainty
    assert ground(GUSTY, WindAloft(0.0, 0.0, 100.0))[0] == pytest.approx(value)


def test_wind_from_ahead_blows_in_and_wind_from_behind_does_not() -> None:
    # the air moves south: it comes from the north
    wind = WindAloft(-10.0, 0.0, 100.0)
    ahead, _ = ground(RestReading(105.0, 3.0, 300, 0.0), wind)
    behind, _ = ground(RestReading(105.0, 3.0, 300, 180.0), wind)
    # log profile over grass: some 39 % of 10 m/s are left at a metre, 9.6 Pa
    assert 105.0 - ahead == pytest.approx(9.5, abs=1.0)
    assert behind == pytest.approx(105.0, abs=1e-6)


def test_a_steady_reading_tells_of_shelter() -> None:
    steady, uncertainty = ground(RestReading(105.0, 0.05, 300, 0.0), WindAloft(-10.0, 0.0, 100.0))
    assert steady > 104.8
    assert uncertainty < 0.5


def test_rests_that_disagree_widen_the_uncertainty() -> None:
    series = resting()
    calm = RestReading(100.0, 0.3, 300, float("nan"))
    alike = zero_offset(series, PLAIN, (calm, calm), None)
    other = zero_offset(series, PLAIN, (calm, RestReading(104.0, 0.3, 300, float("nan"))), None)
    assert other.value_pa == pytest.approx(102.0)
    assert other.standard_uncertainty_pa == pytest.approx(2.0, abs=0.1)
    assert alike.standard_uncertainty_pa < 0.2

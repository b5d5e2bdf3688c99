"""True airspeed at GPS times, and its slopes against finite differences."""

import numpy as np
import pytest

from service.airdata.pitot import true_airspeed_from_impact_pressure
from service.reduction.fit.probe_speed import ProbeSpeed
from tests.unit.reduction.constructed import series_of

TIME_S = 0.1 * np.arange(400)
READING_PA = 170.0 + 20.0 * np.sin(TIME_S / 3.0) + 30.0
AT_S = np.arange(2.0, 36.0, 0.2)
USABLE = np.ones(400, dtype=bool)
SCALE, ZERO_PA, DELAY_S = 0.1, 30.0, 0.25


def probe() -> ProbeSpeed:
    return ProbeSpeed(series_of(READING_PA), USABLE, AT_S)


def test_the_airspeed_is_that_of_the_corrected_reading_before_the_delay() -> None:
    speed = probe().at(AT_S, SCALE, ZERO_PA, DELAY_S).speed_mps
    then = 170.0 + 20.0 * np.sin((AT_S - DELAY_S) / 3.0)
    assert speed == pytest.approx(true_airspeed_from_impact_pressure(np.exp(SCALE) * then, 101325.0, 288.15), abs=2e-3)


@pytest.mark.parametrize(("name", "steps"), [("per_log_scale", (1e-5, 0.0)), ("per_zero_offset", (0.0, 1e-4))])
def test_slopes(name: str, steps: tuple[float, float]) -> None:
    fitted = probe()
    scale, zero = steps
    high = fitted.at(AT_S, SCALE + scale, ZERO_PA + zero, DELAY_S).speed_mps
    low = fitted.at(AT_S, SCALE - scale, ZERO_PA - zero, DELAY_S).speed_mps
    slope = getattr(fitted.at(AT_S, SCALE, ZERO_PA, DELAY_S), name)
    assert slope == pytest.approx((high - low) / (2.0 * (scale + zero)), rel=1e-4)


def test_samples_that_may_not_be_used_have_no_say() -> None:
    spoilt = READING_PA.copy()
    spoilt[::7] = 5000.0
    usable = USABLE.copy()
    usable[::7] = False
    speed = ProbeSpeed(series_of(spoilt), usable, AT_S).at(AT_S, SCALE, ZERO_PA, DELAY_S).speed_mps
    assert speed == pytest.approx(probe().at(AT_S, SCALE, ZERO_PA, DELAY_S).speed_mps, abs=5e-3)


def test_a_gap_in_the_probe_is_not_bridged() -> None:
    usable = (TIME_S < 10.0) | (TIME_S > 14.0)
    covered = ProbeSpeed(series_of(READING_PA), usable, AT_S).covers(AT_S, 0.0)
    inside = (AT_S > 10.5) & (AT_S < 13.5)
    assert not covered[inside].any()
    assert covered[(AT_S < 9.5) | (AT_S > 14.5)].all()


def test_no_usable_sample_covers_nothing() -> None:
    assert not ProbeSpeed(series_of(READING_PA), ~USABLE, AT_S).covers(AT_S, 0.0).any()


def test_a_reading_below_its_zero_is_no_airspeed_and_no_error() -> None:
    speed = probe().at(AT_S, SCALE, 400.0, DELAY_S).speed_mps
    assert np.all(np.isfinite(speed))
    assert np.all(speed < 0.1)

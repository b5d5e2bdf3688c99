"""GPS delay from the lag of the air heading behind the yaw."""

import numpy as np
import pytest

from service.domain.arrays import FloatArray, IntArray
from service.domain.log import AttitudeSamples
from service.reduction.gps_delay import PRIOR_S, PRIOR_UNCERTAINTY_S, GpsDelay, delay_from_heading, prior_delay

STEP_S = 0.2
TURN_S = 30.0


def flown(
    delay_s: float, compass_error_deg: float = 0.0, both_ways: bool = True, pitch_deg: float = 3.0
) -> tuple[FloatArray, FloatArray, IntArray, AttitudeSamples]:
    """Four turns one way, four the other; the GPS stamps the velocity `delay_s` late."""
    fine = np.arange(0.0, 8.0 * TURN_S, 0.05)
    rate = np.where((fine < 4.0 * TURN_S) | (not both_ways), 1.0, -1.0) * 2.0 * np.pi / TURN_S
    yaw = np.cumsum(rate) * 0.05
    gps_s = np.arange(0.0, 8.0 * TURN_S, STEP_S)
    heading = np.interp(gps_s - delay_s, fine, yaw) + np.random.default_rng(1).normal(0.0, 0.01, gps_s.size)
    attitude = AttitudeSamples(
        fine, np.zeros(fine.size), np.full(fine.size, pitch_deg), np.mod(np.degrees(yaw) + compass_error_deg, 360.0)
    )
    return gps_s, heading, (gps_s / TURN_S).astype(np.int64), attitude


def is_prior(delay: GpsDelay) -> bool:
    return (delay.value_s, delay.standard_uncertainty_s) == (PRIOR_S, PRIOR_UNCERTAINTY_S)


@pytest.mark.parametrize("delay_s", [0.05, 0.25, 0.5])
@pytest.mark.parametrize("compass_error_deg", [0.0, 12.0, 200.0])
def test_the_delay_is_told_from_a_compass_error(delay_s: float, compass_error_deg: float) -> None:
    delay = delay_from_heading(*flown(delay_s, compass_error_deg))
    assert abs(delay.value_s - delay_s) < 2.5 * delay.standard_uncertainty_s
    assert delay.value_s == pytest.approx(delay_s, abs=0.07)
    assert delay.standard_uncertainty_s < 0.1


def test_turns_one_way_tell_nothing() -> None:
    assert is_prior(delay_from_heading(*flown(0.5, both_ways=False)))


def test_without_attitude_it_is_the_prior() -> None:
    gps_s, heading, piece, _ = flown(0.5)
    assert is_prior(delay_from_heading(gps_s, heading, piece, None))
    assert is_prior(prior_delay())


def test_an_aircraft_on_its_tail_has_no_yaw() -> None:
    assert is_prior(delay_from_heading(*flown(0.5, pitch_deg=-88.0)))


def test_too_few_turns_or_no_samples() -> None:
    gps_s, heading, piece, attitude = flown(0.5)
    assert is_prior(delay_from_heading(gps_s, heading, np.minimum(piece, 2), attitude))
    assert is_prior(delay_from_heading(gps_s[:0], heading[:0], piece[:0], attitude))


def test_unknown_yaw_is_left_out() -> None:
    gps_s, heading, piece, attitude = flown(0.4)
    attitude.yaw_deg[::3] = np.nan
    assert delay_from_heading(gps_s, heading, piece, attitude).value_s == pytest.approx(0.4, abs=0.07)
    attitude.yaw_deg[:] = np.nan
    assert is_prior(delay_from_heading(gps_s, heading, piece, attitude))

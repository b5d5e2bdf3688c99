"""Load factor: the three sources against the check values, the filter, and what happens when a source is silent."""

from dataclasses import replace

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from service.domain.log import AttitudeSamples, LoadFactorSamples
from service.domain.results import AirDataSeries
from service.reduction.load_factor import ACCELEROMETER_UNCERTAINTY, UNSEEN_ACCELERATION, load_factor_at
from tests.unit.reduction.constructed import series_of

# check values f: bank [deg] -> load factor [exact]
BANKS = {15: 1.0353, 20: 1.0642, 30: 1.1547, 40: 1.3054, 45: 1.4142, 50: 1.5557, 60: 2.0}


def accelerometer(time_s: FloatArray, load_factor: FloatArray | float) -> LoadFactorSamples:
    return LoadFactorSamples(time_s, np.broadcast_to(load_factor, time_s.shape).astype(float), "accelerometer")


def attitude(time_s: FloatArray, roll_deg: FloatArray | float) -> AttitudeSamples:
    roll = np.broadcast_to(roll_deg, time_s.shape).astype(float)
    return AttitudeSamples(time_s, roll, np.zeros_like(roll), np.zeros_like(roll))


def flight(n: int = 600, step_s: float = 0.1, speed_mps: float = 0.0, turn_rate_dps: float = 0.0) -> AirDataSeries:
    """A steady circle in a wind of 8 m/s from the west, GPS at the probe's rate."""
    series = series_of(np.full(n, 200.0), step_s)
    heading = np.radians(turn_rate_dps) * series.gps_time_s
    return replace(
        series,
        velocity_north_mps=speed_mps * np.cos(heading),
        velocity_east_mps=speed_mps * np.sin(heading) + 8.0,
    )


# --- bank and turn rate -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("bank_deg", "expected"), BANKS.items())
@pytest.mark.parametrize("side", [-1.0, 1.0])
def test_bank_gives_the_load_factor_of_the_level_turn(bank_deg: int, expected: float, side: float) -> None:
    series = flight()
    answer = load_factor_at(series, None, attitude(np.arange(0.0, 60.0, 0.2), side * bank_deg))
    assert answer.load_factor == pytest.approx(np.full(600, expected), abs=5.1e-5)
    assert answer.source == "bank angle, as in a level coordinated turn"
    assert (answer.standard_uncertainty >= UNSEEN_ACCELERATION).all()


# check values f: TAS [m/s], bank [deg] -> turn rate [deg/s] [exact]
@pytest.mark.parametrize(
    ("speed_mps", "bank_deg", "turn_rate_dps"),
    [(15, 30, 21.6268), (20, 30, 16.2201), (20, 45, 28.0940), (25, 45, 22.4752), (50, 30, 6.4880)],
)
def test_the_gps_turn_gives_it_in_any_wind(speed_mps: float, bank_deg: int, turn_rate_dps: float) -> None:
    answer = load_factor_at(flight(speed_mps=speed_mps, turn_rate_dps=turn_rate_dps), None, None)
    inner = slice(10, -10)  # differences are one-sided at the ends
    assert answer.load_factor[inner] == pytest.approx(np.full(580, BANKS[bank_deg]), rel=6e-3)
    assert answer.source.startswith("turn rate")


def test_a_pull_up_shows_in_the_vertical_velocity() -> None:
    series = flight()
    down = -0.5 * np.clip(series.gps_time_s - 30.0, 0.0, 10.0) * 9.80665  # half a g upward for ten seconds
    answer = load_factor_at(replace(series, velocity_down_mps=down), None, None)
    assert answer.load_factor[350] == pytest.approx(1.5)
    assert answer.load_factor[200] == pytest.approx(1.0)


def test_the_delay_of_the_gps_is_taken_off() -> None:
    series = flight()
    down = -0.5 * np.clip(series.gps_time_s - 30.0, 0.0, 10.0) * 9.80665
    late = load_factor_at(replace(series, velocity_down_mps=down), None, None, gps_delay_s=0.4)
    prompt = load_factor_at(replace(series, velocity_down_mps=down), None, None)
    assert late.load_factor[290:400] == pytest.approx(prompt.load_factor[294:404])


def test_bank_beyond_any_level_turn_says_nothing() -> None:
    roll = np.where(np.arange(300) < 150, 30.0, 120.0)
    series = replace(flight(), gps_time_s=np.empty(0), velocity_north_mps=np.empty(0))
    series = replace(series, velocity_east_mps=np.empty(0), velocity_down_mps=np.empty(0))
    answer = load_factor_at(series, None, attitude(np.arange(0.0, 60.0, 0.2), roll))
    assert np.isfinite(answer.load_factor[:300]).all()
    assert np.isnan(answer.load_factor[310:]).all()


# --- accelerometer ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("rate_hz", [1.0, 5.0, 20.0, 100.0, 1000.0])
def test_a_steady_load_is_read_at_any_rate(rate_hz: float) -> None:
    answer = load_factor_at(flight(), accelerometer(np.arange(-1.0, 62.0, 1.0 / rate_hz), 1.4142), None)
    assert answer.load_factor == pytest.approx(np.full(600, 1.4142))
    assert answer.standard_uncertainty == pytest.approx(np.full(600, ACCELEROMETER_UNCERTAINTY))
    assert answer.source == "accelerometer, low-passed at 2 Hz"


@pytest.mark.parametrize(
    ("frequency_hz", "passes"), [(0.2, (0.99, 1.0)), (2.0, (0.69, 0.73)), (10.0, (0.0, 0.05)), (60.0, (0.0, 0.005))]
)
def test_the_filter_passes_manoeuvres_and_stops_the_structure(frequency_hz: float, passes: tuple[float, float]) -> None:
    time_s = np.arange(-1.0, 62.0, 1 / 997.0)
    wave = accelerometer(time_s, 1.0 + 0.5 * np.sin(2 * np.pi * frequency_hz * time_s))
    series = flight(6000, 0.01)
    found = load_factor_at(series, wave, None).load_factor - 1.0
    sine, cosine = (2 * np.mean(found * f(2 * np.pi * frequency_hz * series.time_s)) for f in (np.sin, np.cos))
    assert passes[0] <= np.hypot(sine, cosine) / 0.5 <= passes[1]
    assert abs(cosine) < 0.005  # no delay


def test_vibration_does_not_hide_a_pull_up() -> None:
    rng = np.random.default_rng(1)
    time_s = np.arange(0.0, 60.0, 0.005)
    pull = np.where(np.abs(time_s - 30.0) < 0.5, np.cos(np.pi * (time_s - 30.0)), 0.0)
    shaken = 1.0 + pull + 2.0 * np.sin(2 * np.pi * 40.0 * time_s) + 0.5 * rng.standard_normal(time_s.size)
    answer = load_factor_at(flight(6000, 0.01), accelerometer(time_s, shaken), None)
    assert answer.load_factor[3000] == pytest.approx(1.98, abs=0.15)
    calm = np.abs(answer.load_factor[:2800] - 1.0)
    assert calm.std() < 0.15


def test_what_noise_passes_the_filter_is_stated() -> None:
    time_s = np.arange(0.0, 60.0, 0.02)
    noisy = accelerometer(time_s, 1.0 + 0.6 * np.random.default_rng(2).standard_normal(time_s.size))
    answer = load_factor_at(flight(), noisy, None)
    left = (answer.load_factor - 1.0).std()
    stated = np.sqrt(answer.standard_uncertainty[0] ** 2 - ACCELEROMETER_UNCERTAINTY**2)
    assert stated == pytest.approx(left, rel=0.15)


def test_gaps_are_not_bridged_and_bank_fills_them() -> None:
    time_s = np.arange(0.0, 60.0, 0.05)
    holed = accelerometer(time_s, np.where((time_s > 20.0) & (time_s < 30.0), np.nan, 1.2))
    answer = load_factor_at(flight(), holed, attitude(time_s, 45.0))
    assert answer.load_factor[100] == pytest.approx(1.2)
    assert answer.load_factor[250] == pytest.approx(1.4142, abs=1e-4)
    assert "accelerometer, low-passed at 2 Hz (85 % of the flight)" in answer.source
    assert "bank angle" in answer.source


@pytest.mark.parametrize("dead", [0.0, 9.81, -1.0])
def test_a_dead_upside_down_or_wrongly_scaled_accelerometer_is_left_aside(dead: float) -> None:
    time_s = np.arange(0.0, 60.0, 0.05)
    answer = load_factor_at(flight(), accelerometer(time_s, dead), attitude(time_s, 30.0))
    assert answer.load_factor == pytest.approx(np.full(600, 1.1547), abs=1e-4)
    assert answer.source.startswith("bank")


# --- nothing to go by -------------------------------------------------------------------------------------------------


def without_gps(n: int = 10) -> AirDataSeries:
    nothing = np.empty(0)
    return replace(
        series_of(np.full(n, 200.0)),
        gps_time_s=nothing,
        velocity_north_mps=nothing,
        velocity_east_mps=nothing,
        velocity_down_mps=nothing,
    )


def test_without_any_source_it_is_unknown() -> None:
    answer = load_factor_at(without_gps(), None, None)
    assert np.isnan(answer.load_factor).all()
    assert np.isnan(answer.standard_uncertainty).all()
    assert not answer.assumed.any()
    assert answer.source == "none"


def test_the_maximum_bank_stands_for_the_worst_case_in_flight_only() -> None:
    series = replace(without_gps(), on_ground=np.arange(10) < 4)
    answer = load_factor_at(series, None, None, maximum_bank_deg=45.0)
    assert answer.load_factor[4:] == pytest.approx(np.full(6, 1.4142), abs=1e-4)
    assert np.isnan(answer.load_factor[:4]).all()
    assert answer.assumed.tolist() == [False] * 4 + [True] * 6
    assert answer.source == "assumed at the maximum bank of 45 deg"


def test_a_measured_load_factor_is_not_replaced_by_the_worst_case() -> None:
    answer = load_factor_at(flight(), None, attitude(np.arange(0.0, 60.0, 0.2), 10.0), maximum_bank_deg=60.0)
    assert not answer.assumed.any()
    assert answer.load_factor.max() < 1.02


@pytest.mark.parametrize("samples", [0, 1, 2, 3])
def test_hostile_shapes(samples: int) -> None:
    time_s = np.arange(float(samples))
    for values in (np.full(samples, 1.1), np.full(samples, np.nan)):
        for series in (flight(5), flight(0), without_gps(0)):
            answer = load_factor_at(series, accelerometer(time_s, values), attitude(time_s, values), 30.0)
            assert answer.load_factor.shape == answer.assumed.shape == series.time_s.shape

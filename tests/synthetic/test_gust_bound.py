"""The bound of the speed scale: against closed forms where there are any, and against estimates from drawn gusts."""

from dataclasses import replace

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from tests.montecarlo.gust_bound import SCALE, LinearModel, linear_model, speed_scale_bound
from tests.montecarlo.gust_covariance import covariance_along
from tests.synthetic.families import simulate_mixed
from tests.synthetic.gust_field import GustField, GustModel, Spectrum, low_altitude_dryden
from tests.synthetic.truth import SimulatedFlight, TrueNoise

FIELDS, PLACES = 200, 60
"""Fields drawn, and places far apart in each of them: as good as so many fields more."""
FLIGHTS = 1000
SIGMA_MPS, LENGTH_M = 0.8, 150.0
MODELS = {
    "von_karman": GustModel(Spectrum.VON_KARMAN, SIGMA_MPS, LENGTH_M),
    "dryden": GustModel(Spectrum.DRYDEN, SIGMA_MPS, LENGTH_M),
    "anisotropic": low_altitude_dryden(SIGMA_MPS, 100.0),
}


@pytest.fixture(scope="module")
def flights() -> dict[str, SimulatedFlight]:
    return {family: each[0] for family, each in simulate_mixed(["light", "with_ground"], 1, seed=3).items()}


def _spans(flight: SimulatedFlight) -> list[tuple[float, float]]:
    return [(loiter.start_s, loiter.end_s) for loiter in flight.truth.loiters]


def _drawn(model: GustModel, position_m: FloatArray, fields: int) -> FloatArray:
    """(fields, n, 3) gusts of as many fields at the same places. [m/s]"""
    field = GustField([model] * fields, [np.random.default_rng([8, index]) for index in range(fields)])
    return np.array([field.along(index, position_m.T).T for index in range(fields)])


def test_the_truth_tells_mean_wind_and_gusts_apart(flights: dict[str, SimulatedFlight]) -> None:
    truth = flights["light"].truth
    air = np.array([truth.air_north_mps, truth.air_east_mps, truth.air_down_mps])
    airspeed = np.linalg.norm(truth.ground_velocity_mps - air, axis=0)
    np.testing.assert_allclose(airspeed, truth.true_airspeed_mps, rtol=1e-9)
    gusts = air[:2] - [truth.undisturbed_north_mps, truth.undisturbed_east_mps]
    # the mean wind is that of 100 m times a smooth factor of the height alone; the rest has the gusts' strength
    factor = truth.undisturbed_north_mps / truth.mean_wind_north_mps
    np.testing.assert_allclose(factor, truth.undisturbed_east_mps / truth.mean_wind_east_mps)
    np.testing.assert_allclose(factor, (truth.height_m / 100.0) ** (1.0 / 7.0))
    assert np.sqrt(np.mean(gusts**2)) == pytest.approx(truth.sigma_mps, rel=0.4)


@pytest.mark.parametrize("name", MODELS)
def test_the_covariance_is_that_of_drawn_gusts(name: str) -> None:
    rng = np.random.default_rng(2)
    position = rng.uniform(-60.0, 60.0, (6, 3))
    direction = rng.standard_normal((6, 3))
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    places = rng.uniform(-5e4, 5e4, (PLACES, 1, 3))
    drawn = _drawn(MODELS[name], (places + position).reshape(-1, 3), FIELDS)
    along = np.sum(drawn.reshape(-1, 6, 3) * direction, axis=2)
    expected = covariance_along(MODELS[name], position, np.zeros(6), direction)
    # the standard error of a covariance of normal values is at most that of a variance, sqrt(2 / count)
    tolerance = 5.0 * SIGMA_MPS**2 * np.sqrt(2.0 / len(along))
    np.testing.assert_allclose(along.T @ along / len(along), expected, atol=tolerance)


def test_vertical_gusts_of_an_anisotropic_field_are_weaker() -> None:
    model, up = MODELS["anisotropic"], np.array([[0.0, 0.0, 1.0]])
    variance = covariance_along(model, np.zeros((1, 3)), np.zeros(1), up)[0, 0]
    # MIL-F-8785C: sigma_w / sigma_u = (0.177 + 0.000823 h)^0.4, h in feet
    assert np.sqrt(variance) / SIGMA_MPS == pytest.approx((0.177 + 0.000823 * 100.0 / 0.3048) ** 0.4)


def test_a_decaying_field_is_forgotten_with_its_turnover() -> None:
    model = replace(MODELS["dryden"], turnover_s=50.0)
    north = np.tile([1.0, 0.0, 0.0], (3, 1))
    covariance = covariance_along(model, np.zeros((3, 3)), np.array([0.0, 50.0, 100.0]), north)
    np.testing.assert_allclose(covariance[0], SIGMA_MPS**2 * np.exp([0.0, -1.0, -2.0]))


@pytest.mark.parametrize(
    ("arc_deg", "percent"), [(360.0, 0.36), (270.0, 0.40), (180.0, 0.80), (120.0, 1.93), (90.0, 3.56), (60.0, 8.27)]
)
def test_white_noise_on_an_arc_gives_the_printed_precision(arc_deg: float, percent: float) -> None:
    """Check values, "Expected precision" (constructed): 60 samples, noise 0.5 m/s, airspeed 18 m/s."""
    heading = np.radians(np.linspace(0.0, arc_deg, 60))
    design = np.column_stack([np.full(60, 9.0), np.zeros((60, 2)), np.cos(heading), np.sin(heading)])
    model = LinearModel(design, 0.25 * np.eye(60), np.array([0.0, 1.0, 1.0, 0.0, 0.0]))
    assert 50.0 * model.deviations()[SCALE] == pytest.approx(percent, abs=0.5e-2)


def _without_gusts(flight: SimulatedFlight, probe_pa: float, gps_mps: float) -> SimulatedFlight:
    """The same way, as if there had been white noise alone."""
    truth = flight.truth
    noise = TrueNoise(probe_pa, gps_mps, gps_slow_mps=0.0, gps_slow_time_s=20.0)
    return replace(flight, truth=replace(truth, gust=replace(truth.gust, sigma_mps=0.0), noise=noise))


@pytest.mark.parametrize(("probe_pa", "gps_mps"), [(50.0, 0.0), (0.0, 3.0)])
def test_a_flight_without_gusts_is_bounded_by_its_noise_and_priors(
    flights: dict[str, SimulatedFlight], probe_pa: float, gps_mps: float
) -> None:
    flight = _without_gusts(flights["light"], probe_pa, gps_mps)
    truth, spans = flight.truth, _spans(flight)
    inside = np.any([(truth.time_s >= start) & (truth.time_s <= end) for start, end in spans], axis=0)
    speed = truth.true_airspeed_mps[inside].mean()
    density = truth.static_pressure_pa[inside].mean() / (287.05287 * truth.air_temperature_k[inside].mean())
    dynamic = 0.5 * density * speed**2
    # sigma / (V sqrt(n)) of the noise: 10 readings and 5 velocities a second, but for those that the winds take
    seconds = sum(_seconds_for_the_level(flight, span) for span in spans)
    probe_mps = probe_pa * truth.pressure_scale * speed / (2.0 * dynamic)
    noise = np.sqrt(probe_mps**2 / (10.0 * seconds) + gps_mps**2 / (5.0 * seconds)) / speed
    # dV/V = b / (2 q) of a zero known to 1 Pa, and half of dT/T of a thermometer good to half a kelvin
    zero = 0.5 * 1.0 * truth.pressure_scale / dynamic
    temperature = 0.5 * 0.5 / truth.air_temperature_k.mean()
    expected = np.sqrt(noise**2 + zero**2 + temperature**2)
    assert speed_scale_bound(flight, spans) == pytest.approx(expected, rel=0.03)


def _seconds_for_the_level(flight: SimulatedFlight, span: tuple[float, float]) -> float:
    """Time that a loiter is worth for the level of the airspeed: all of it where its headings average to nothing."""
    truth = flight.truth
    heading = np.radians(truth.heading_deg[(truth.time_s >= span[0]) & (truth.time_s <= span[1])])
    unit = np.array([np.cos(heading), np.sin(heading)])
    mean, product = unit.mean(axis=1), unit @ unit.T / heading.size
    return float((span[1] - span[0]) * (1.0 - mean @ np.linalg.solve(product, mean)))


def test_a_rest_tells_the_zero_as_well_as_the_ground_wind_allows(flights: dict[str, SimulatedFlight]) -> None:
    flight = flights["with_ground"]
    spans = _spans(flight)
    calm = _without_gusts(flight, 0.8, 0.1)
    # without gusts minutes at rest leave 0.8 Pa over the root of some hundreds; in them most of the prior remains
    known, unsure = (linear_model(each, spans).prior_precision[1] ** -0.5 for each in (calm, flight))
    assert known == pytest.approx(0.8 / np.sqrt(10.0 * _rest_s(flight)), rel=0.1)
    assert 3.0 * known < unsure < 1.0


def _rest_s(flight: SimulatedFlight) -> float:
    still = np.linalg.norm(flight.truth.ground_velocity_mps, axis=0) < 1e-3
    return float(np.sum(still & flight.truth.on_ground)) * 0.1


def test_least_squares_with_the_true_covariance_reaches_the_bound_and_plain_least_squares_does_not(
    flights: dict[str, SimulatedFlight],
) -> None:
    """Observations made from drawn fields, noise and priors along a flown path: errors of both estimators."""
    truth = flights["light"].truth
    flight = replace(flights["light"], truth=replace(truth, gust=replace(truth.gust, sigma_mps=1.2)))
    model = linear_model(flight, _spans(flight), point_s=2.0)
    errors = _drawn_observations(flight, model)
    best = errors @ model.gain()[SCALE]
    plain = errors @ replace(model, covariance=np.eye(model.design.shape[0])).gain()[SCALE]
    expected = model.deviations()[SCALE]
    tolerance = 4.5 / np.sqrt(2.0 * FLIGHTS)
    assert np.sqrt(np.mean(best**2)) == pytest.approx(expected, rel=tolerance)
    assert np.sqrt(np.mean(plain**2)) > expected
    assert np.mean(best**2) < np.mean(plain**2)


def _drawn_observations(flight: SimulatedFlight, model: LinearModel) -> FloatArray:
    """(flights, n) right sides: gusts along the flight's way, noise, zero and delay by their priors."""
    truth, rng = flight.truth, np.random.default_rng(4)
    time_s = _model_times(flight, model)
    air = truth.ground_velocity_mps.copy()
    air[0] -= truth.undisturbed_north_mps
    air[1] -= truth.undisturbed_east_mps
    position = np.cumsum(0.1 * air, axis=1)
    at = np.column_stack([np.interp(time_s, truth.time_s, part) for part in position])
    direction = np.column_stack([np.interp(time_s, truth.time_s, part) for part in air / np.linalg.norm(air, axis=0)])
    gusts = -np.sum(_drawn(truth.gust, at, FLIGHTS) * direction, axis=2)
    gustless = replace(flight, truth=replace(truth, gust=replace(truth.gust, sigma_mps=0.0)))
    noise_covariance = linear_model(gustless, _spans(flight), point_s=2.0).covariance
    noise = rng.standard_normal((FLIGHTS, time_s.size)) @ np.linalg.cholesky(noise_covariance).T
    known = np.flatnonzero(model.prior_precision)
    drawn = rng.standard_normal((FLIGHTS, known.size)) / np.sqrt(model.prior_precision[known])
    return np.asarray(gusts + noise + drawn @ model.design[:, known].T)


def _model_times(flight: SimulatedFlight, model: LinearModel) -> FloatArray:
    spans = _spans(flight)
    count = model.design.shape[0] // len(spans)
    return np.concatenate([start + (np.arange(count) + 0.5) * (end - start) / count for start, end in spans])

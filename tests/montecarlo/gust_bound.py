"""Cramer-Rao bound of the speed scale of one simulated flight, its true gust covariance known.

Linearised about the truth (method notes), with e the direction of flight through the air,

    V_probe(K, b) - |v_g - W| = -e . g + noise,

and the unknowns ln K, zero offset b, GPS delay and one wind for each loiter are found best, among all unbiased
estimators, by generalised least squares under the covariance of the right side. That covariance is the one the flight
was drawn from: the true field's, the sensors' white noise and the slow noise of the GPS. Known beforehand is what the
method notes state (the zero within 1 Pa, or U(60, 120) Pa of a raw probe; the delay U(0.05, 0.5) s; the temperature to
its sensor's uncertainty, or 10 K), and the readings at rest, in the gusts of the ground, the mean wind there known. The
winds are free.

Nobody knows the true covariance, so a good estimator comes near the bound and does not quite reach it. Scale and zero
have their slopes at the mean airspeed of each loiter: the quicker changes are made by the very gusts (trap 2 of the
notes), and a linear model, which takes its design for given, would read from them what they do not hold.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import linalg

from service.domain.arrays import FloatArray
from tests.montecarlo.gust_covariance import covariance_along
from tests.synthetic.air import GAS_CONSTANT, impact_pressure_pa
from tests.synthetic.sensors import TAIL_WIND_SHARE
from tests.synthetic.truth import SimulatedFlight, Truth

POINT_S = 0.5
"""Spacing of the points. Half of it lowers the bound by 0.3 % in most families, by 1 % in still air; twice of it raises
it by 0.5 and 2 %."""
MOST_POINTS = 800
"""More are spread thinner: the work grows with their cube."""
REST_POINT_S = 1.0
COMPENSATED_ZERO_PA = 1.0
RAW_ZERO_PA = 60.0 / np.sqrt(12.0)
DELAY_S = 0.45 / np.sqrt(12.0)
STANDARD_TEMPERATURE_K = 10.0
"""Spreads that the method notes give: N(0, 1 Pa), U(60, 120) Pa, U(0.05, 0.5) s, N(0, 10 K)."""
SCALE, ZERO, DELAY, WINDS = 0, 1, 2, 3
"""Columns of the design; two for each loiter's wind from `WINDS` on."""


@dataclass(frozen=True, slots=True)
class LinearModel:
    """Observations of n points about the truth, and what is known beforehand of the p unknowns."""

    design: FloatArray
    """(n, p) slopes by ln K [m/s], zero offset [m/s/Pa], GPS delay [m/s2] and winds [1]."""
    covariance: FloatArray
    """(n, n) of gusts and noise. [m2/s2]"""
    prior_precision: FloatArray
    """(p,) one over the variance; 0 for the free ones."""

    def gain(self) -> FloatArray:
        """(p, n) estimates of the unknowns per unit of observation: generalised least squares."""
        whitened = linalg.cho_solve(linalg.cho_factor(self.covariance, lower=True), self.design)
        return np.asarray(np.linalg.solve(self._information(whitened), whitened.T))

    def deviations(self) -> FloatArray:
        """(p,) smallest standard deviations of the unknowns."""
        whitened = linalg.cho_solve(linalg.cho_factor(self.covariance, lower=True), self.design)
        return np.asarray(np.sqrt(np.diag(np.linalg.inv(self._information(whitened)))))

    def _information(self, whitened: FloatArray) -> FloatArray:
        return np.asarray(self.design.T @ whitened + np.diag(self.prior_precision))


def speed_scale_bound(flight: SimulatedFlight, spans: Sequence[tuple[float, float]], point_s: float = POINT_S) -> float:
    """Smallest relative standard deviation of the speed scale from the loiters `spans`, start and end. [s]"""
    log_scale = float(linear_model(flight, spans, point_s).deviations()[SCALE])
    temperature = flight.log.temperature
    doubt_k = STANDARD_TEMPERATURE_K if temperature is None else temperature.standard_uncertainty_k
    # an error of the density is one of K; the speed scale is its root
    return 0.5 * float(np.hypot(log_scale, doubt_k / flight.truth.air_temperature_k.mean()))


def linear_model(
    flight: SimulatedFlight, spans: Sequence[tuple[float, float]], point_s: float = POINT_S
) -> LinearModel:
    """Points about `point_s` apart over the spans."""
    truth = flight.truth
    point_s = max(point_s, sum(end - start for start, end in spans) / MOST_POINTS)
    time_s, loiter = _points(truth, spans, point_s)
    path = _Path(truth)
    direction = path.direction(time_s)
    slopes = _levelled(_probe_slopes(truth, time_s), loiter)
    delayed = path.at(time_s, np.gradient(path.speed_mps, truth.time_s))
    winds = np.zeros((time_s.size, 2 * len(spans)))
    for number in range(len(spans)):
        inside = loiter == number
        winds[inside, 2 * number : 2 * number + 2] = direction[inside, :2]
    prior = np.zeros(WINDS + 2 * len(spans))
    prior[ZERO] = _zero_precision(flight, path)
    prior[DELAY] = 1.0 / DELAY_S**2
    gusts = covariance_along(truth.gust, path.position(time_s), time_s, direction)
    return LinearModel(
        np.column_stack([slopes, -delayed, winds]),
        gusts + _noise_covariance(flight, time_s, direction, slopes[:, 1], point_s),
        prior,
    )


class _Path:
    """The way through the undisturbed air: mean wind, without gusts."""

    def __init__(self, truth: Truth) -> None:
        self._time_s = truth.time_s
        self.wind_mps = np.vstack(
            [truth.undisturbed_north_mps, truth.undisturbed_east_mps, np.zeros(truth.time_s.size)]
        )
        self.velocity_mps = truth.ground_velocity_mps - self.wind_mps
        self.speed_mps = np.linalg.norm(self.velocity_mps, axis=0)
        steps = np.diff(truth.time_s) * 0.5 * (self.velocity_mps[:, 1:] + self.velocity_mps[:, :-1])
        self._position_m = np.hstack([np.zeros((3, 1)), np.cumsum(steps, axis=1)])

    def at(self, time_s: FloatArray, values: FloatArray) -> FloatArray:
        return np.interp(time_s, self._time_s, values)

    def position(self, time_s: FloatArray) -> FloatArray:
        """(n, 3) in the air mass. [m]"""
        return np.column_stack([self.at(time_s, part) for part in self._position_m])

    def direction(self, time_s: FloatArray) -> FloatArray:
        """(n, 3) unit vectors of flight through the air."""
        return np.column_stack([self.at(time_s, part) for part in self.velocity_mps / self.speed_mps])


def _points(truth: Truth, spans: Sequence[tuple[float, float]], point_s: float) -> tuple[FloatArray, FloatArray]:
    """Times of the points, and the loiter of each."""
    times, loiters = [], []
    for number, (start_s, end_s) in enumerate(spans):
        last = min(end_s, float(truth.time_s[-1]))
        count = max(round((last - start_s) / point_s), 2)
        each = start_s + (np.arange(count) + 0.5) * (last - start_s) / count
        times.append(each)
        loiters.append(np.full(count, float(number)))
    return np.concatenate(times), np.concatenate(loiters)


def _probe_slopes(truth: Truth, time_s: FloatArray) -> FloatArray:
    """(n, 2) slopes of the probe's true airspeed by ln K [m/s] and by the zero offset [m/s/Pa]."""
    speed, pressure, temperature = (
        np.interp(time_s, truth.time_s, values)
        for values in (truth.true_airspeed_mps, truth.static_pressure_pa, truth.air_temperature_k)
    )
    impact = impact_pressure_pa(speed, pressure, temperature)
    # M^2 = 5 [(1 + x)^(2/7) - 1], x = q/p, and V is proportional to M
    ratio = impact / pressure
    mach_squared = 5.0 * ((1.0 + ratio) ** (2.0 / 7.0) - 1.0)
    by_log_scale = speed * (5.0 / 7.0) * ratio * (1.0 + ratio) ** (-5.0 / 7.0) / mach_squared
    return np.column_stack([by_log_scale, -truth.pressure_scale * by_log_scale / impact])


def _levelled(slopes: FloatArray, loiter: FloatArray) -> FloatArray:
    """(n, 2) means over each loiter."""
    level = slopes.copy()
    for number in np.unique(loiter):
        level[loiter == number] = slopes[loiter == number].mean(axis=0)
    return level


def _noise_covariance(
    flight: SimulatedFlight, time_s: FloatArray, direction: FloatArray, by_zero: FloatArray, point_s: float
) -> FloatArray:
    """(n, n) of what probe and GPS add, each averaged over the samples of a point."""
    noise = flight.truth.noise
    assert flight.log.probe is not None
    assert flight.log.gps is not None
    probe = by_zero**2 * noise.probe_pa**2 * _step_s(flight.log.probe.time_s) / point_s
    gps = noise.gps_mps**2 * _step_s(flight.log.gps.time_s) / point_s
    fading = np.exp(-np.abs(time_s[:, None] - time_s) / noise.gps_slow_time_s)
    slow = noise.gps_slow_mps**2 * fading * (direction @ direction.T)
    return np.asarray(np.diag(probe + gps) + slow)


def _step_s(time_s: FloatArray) -> float:
    return float(np.median(np.diff(time_s)))


def _zero_precision(flight: SimulatedFlight, path: _Path) -> float:
    """One over the variance of the zero offset, of the prior and the rests together. [1/Pa2]"""
    assert flight.log.probe is not None
    precision = 1.0 / (COMPENSATED_ZERO_PA if flight.log.probe.compensated else RAW_ZERO_PA) ** 2
    truth = flight.truth
    still = truth.on_ground & (np.linalg.norm(truth.ground_velocity_mps, axis=0) < 1e-3)
    edges = np.flatnonzero(np.diff(np.concatenate([[0], still.astype(np.int8), [0]])))
    for first, last in edges.reshape(-1, 2).tolist():
        if truth.time_s[last - 1] - truth.time_s[first] > 2.0 * REST_POINT_S:
            precision += 1.0 / _rest_variance(flight, path, first, last)
    return precision


def _rest_variance(flight: SimulatedFlight, path: _Path, first: int, last: int) -> float:
    """Variance of the mean reading at rest about what the mean wind makes it: noise, and gusts along the nose. [Pa2]"""
    truth, probe = flight.truth, flight.log.probe
    assert probe is not None
    time_s = np.arange(truth.time_s[first], truth.time_s[last - 1], REST_POINT_S)
    nose_rad = np.radians(truth.fuselage_heading_deg[first])
    nose = np.array([np.cos(nose_rad), np.sin(nose_rad), 0.0])
    wind = np.column_stack([path.at(time_s, part) for part in path.wind_mps])
    ahead = -wind @ nose
    density = truth.static_pressure_pa[first] / (GAS_CONSTANT * truth.air_temperature_k[first])
    # dynamic pressure of the wind, and the slope of its mean by the gusts
    slope = density * np.where(ahead > 0.0, ahead, TAIL_WIND_SHARE * ahead) / truth.pressure_scale
    gusts = covariance_along(truth.gust, path.position(time_s), time_s, np.tile(nose, (time_s.size, 1)))
    first_order = float(slope @ (gusts @ slope)) / time_s.size**2
    # the square of the gust itself, which is about one gust through a rest
    second_order = 2.0 * (0.5 * density * truth.gust.sigma_mps**2 / truth.pressure_scale) ** 2
    samples = max(float(time_s[-1] - time_s[0]) / _step_s(probe.time_s), 1.0)
    return float(first_order + second_order + truth.noise.probe_pa**2 / samples)

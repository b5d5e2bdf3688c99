"""What the simulated sensors report is the truth, changed as their description says and not otherwise."""

from dataclasses import replace

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from service.domain.log import GpsSamples, ProbeSamples
from tests.synthetic.air import Atmosphere, calibrated_airspeed_mps, impact_pressure_pa
from tests.synthetic.aircraft import draw_response
from tests.synthetic.families import simulate_mixed
from tests.synthetic.flight import FlightHistory, FlightPlan, Leg, MeanWind, Segment, fly_plans
from tests.synthetic.gust_field import GustModel, Spectrum
from tests.synthetic.sensors import FlightName, Gps, Probe, SensorSet, sense
from tests.synthetic.truth import SimulatedFlight

AIR = Atmosphere(250.0, 8.0, -400.0)
PROBE = Probe(pressure_scale=1.2, zero_offset_pa=3.0, noise_pa=0.0)
GPS = Gps(delay_s=0.3, noise_mps=0.0, slow_noise_mps=0.0)
SENSORS = SensorSet(PROBE, GPS)


@pytest.fixture(scope="module")
def flown() -> tuple[FlightPlan, FlightHistory]:
    """A rest in ground wind, then circles."""
    segments = (
        Segment(Leg.REST, 20.0),
        Segment(Leg.ROLL, 5.0),
        Segment(Leg.STRAIGHT, 40.0),
        Segment(Leg.GROUND_CIRCLE, 60.0, loiter=0),
    )
    gust = GustModel(Spectrum.VON_KARMAN, 0.5, 200.0)
    response = draw_response(np.random.default_rng(1))
    plan = FlightPlan(segments, 0.0, MeanWind(-6.0, 0.0), gust, response, AIR)
    return plan, fly_plans([plan], [np.random.default_rng(2)])[0]


def _sense(flown: tuple[FlightPlan, FlightHistory], sensors: SensorSet) -> SimulatedFlight:
    return sense(FlightName("made", 0, 0), *flown, sensors, np.random.default_rng(3))


def _probe(flight: SimulatedFlight) -> ProbeSamples:
    assert flight.log.probe is not None
    return flight.log.probe


def _gps(flight: SimulatedFlight) -> GpsSamples:
    assert flight.log.gps is not None
    return flight.log.gps


def _true_airspeed(flight: SimulatedFlight, impact_pa: FloatArray) -> FloatArray:
    """The contract's own relation, written out here."""
    truth, time_s = flight.truth, _probe(flight).time_s
    pressure = np.interp(time_s, truth.time_s, truth.static_pressure_pa)
    temperature = np.interp(time_s, truth.time_s, truth.air_temperature_k)
    mach = np.sqrt(5.0 * ((impact_pa / pressure + 1.0) ** (2.0 / 7.0) - 1.0))
    return np.asarray(mach * np.sqrt(1.4 * 287.05287 * temperature))


def test_the_probe_holds_the_airspeed_by_the_contracts_pressure_scale(
    flown: tuple[FlightPlan, FlightHistory],
) -> None:
    flight = _sense(flown, SENSORS)
    flying = _probe(flight).time_s > 26.0
    impact = flight.truth.pressure_scale * (_probe(flight).impact_pressure_pa - flight.truth.zero_offset_pa)
    recovered = _true_airspeed(flight, np.maximum(impact, 0.0))
    # a tenth of a second between samples of the truth's temperature and pressure, a twentieth between steps
    np.testing.assert_allclose(recovered[flying], flight.truth.probe_true_airspeed_mps[flying], atol=0.02)
    expected = calibrated_airspeed_mps(impact)
    np.testing.assert_allclose(expected[flying], flight.truth.probe_calibrated_airspeed_mps[flying], atol=0.02)


def test_on_the_ground_the_wind_blows_into_the_probe(flown: tuple[FlightPlan, FlightHistory]) -> None:
    """Head wind of 6 m/s at 100 m: 1.9 m/s at half a metre over grass, 2.1 Pa, less the scale and with the gusts."""
    flight = _sense(flown, SENSORS)
    at_rest = _probe(flight).time_s < 19.0
    felt = np.mean(_probe(flight).impact_pressure_pa[at_rest]) - flight.truth.zero_offset_pa
    assert 0.3 < felt < 6.0


def test_a_velocity_stamped_t_belongs_to_t_less_the_delay(flown: tuple[FlightPlan, FlightHistory]) -> None:
    flight = _sense(flown, SENSORS)
    gps, history = _gps(flight), flown[1]
    later = gps.time_s > 1.0
    for sampled, true in (
        (gps.velocity_north_mps, history.velocity_mps[0]),
        (gps.velocity_east_mps, history.velocity_mps[1]),
    ):
        np.testing.assert_allclose(sampled[later], np.interp(gps.time_s[later] - 0.3, history.time_s, true), atol=1e-9)


def test_a_static_error_is_part_of_the_scale_and_is_seen_in_the_static_pressure(
    flown: tuple[FlightPlan, FlightHistory],
) -> None:
    quiet = replace(SENSORS, static_noise_pa=0.0)
    wrong = replace(quiet, probe=replace(PROBE, static_error=0.02))
    clean, biased = _sense(flown, quiet), _sense(flown, wrong)
    np.testing.assert_allclose(_probe(clean).impact_pressure_pa, _probe(biased).impact_pressure_pa)
    assert clean.log.static is not None
    assert biased.log.static is not None
    excess = biased.log.static.static_pressure_pa - clean.log.static.static_pressure_pa
    speed = np.interp(clean.log.static.time_s, clean.truth.time_s, clean.truth.true_airspeed_mps)
    flying = clean.log.static.time_s > 26.0
    dynamic = impact_pressure_pa(speed, np.array(98000.0), np.array(294.0))
    np.testing.assert_allclose(excess[flying], 0.02 * dynamic[flying], rtol=0.06)


def test_noise_quantum_lag_and_spikes_do_what_they_say(flown: tuple[FlightPlan, FlightHistory]) -> None:
    ideal = _probe(_sense(flown, SENSORS)).impact_pressure_pa

    def reading(probe: Probe) -> FloatArray:
        return _probe(_sense(flown, replace(SENSORS, probe=probe))).impact_pressure_pa

    assert np.std(reading(replace(PROBE, noise_pa=0.8)) - ideal) == pytest.approx(0.8, rel=0.1)
    rounded = reading(replace(PROBE, quantum_pa=0.5))
    np.testing.assert_allclose(rounded * 2.0, np.round(rounded * 2.0))
    assert np.abs(rounded - ideal).max() <= 0.25 + 1e-9
    spiked = np.abs(reading(replace(PROBE, spike_share=0.05)) - ideal) > 19.0
    assert 0.02 < spiked.mean() < 0.09
    # a first-order lag in a steady acceleration trails by the lag times the rate of the reading
    time_s = _probe(_sense(flown, SENSORS)).time_s
    lagging = reading(replace(PROBE, lag_s=0.4))
    rolling = (time_s > 22.0) & (time_s < 24.5)
    rate = np.gradient(ideal, time_s)
    assert np.mean((ideal - lagging)[rolling]) == pytest.approx(0.4 * np.mean(rate[rolling]), rel=0.2)


def test_rates_and_streams_follow_the_sensor_set(flown: tuple[FlightPlan, FlightHistory]) -> None:
    slow = SensorSet(replace(PROBE, rate_hz=1.0), replace(GPS, rate_hz=1.0, components=False), has_temperature=False)
    flight = _sense(flown, slow)
    np.testing.assert_allclose(np.diff(_probe(flight).time_s), 1.0)
    np.testing.assert_allclose(np.diff(_gps(flight).time_s), 1.0)
    assert _gps(flight).velocity_down_mps is None
    assert flight.log.temperature is None
    lost = _sense(flown, replace(SENSORS, gps=replace(GPS, fix=False)))
    assert np.all(np.isnan(_gps(lost).velocity_north_mps))


def test_the_truth_of_a_loiter_is_the_mean_air_velocity_along_its_path() -> None:
    flight = simulate_mixed(["light"], 1, seed=21)["light"][0]
    loiter = flight.truth.loiters[0]
    north, east = flight.truth.mean_air_velocity([(loiter.start_s, loiter.end_s)])
    assert north == pytest.approx(loiter.mean_air_north_mps, abs=5e-3)
    assert east == pytest.approx(loiter.mean_air_east_mps, abs=5e-3)
    assert np.hypot(north, east) == pytest.approx(6.0, abs=1.5)
    gps, truth = _gps(flight), flight.truth
    inside = (gps.time_s > loiter.start_s + 1.0) & (gps.time_s < loiter.end_s)
    speed = np.hypot(gps.velocity_north_mps - north, gps.velocity_east_mps - east)[inside]
    airspeed = np.interp(gps.time_s[inside] - truth.gps_delay_s, truth.time_s, truth.true_airspeed_mps)
    assert np.mean(speed - airspeed) == pytest.approx(0.0, abs=0.3)

"""Every family flies, keeps the contract of a decoded log and is what its name says."""

import numpy as np
import pytest

from service.domain.arrays import FloatArray
from service.domain.codes import FaultKind
from service.domain.log import ProbeSamples
from tests.synthetic.families import FAMILIES, simulate, simulate_mixed
from tests.synthetic.flight import STEP_S
from tests.synthetic.truth import SimulatedFlight, Truth

Flights = dict[str, list[SimulatedFlight]]
FAULTY = ("frozen", "blocked", "trapped", "swapped")
LEAST_COVERAGE_DEG = 230.0


@pytest.fixture(scope="module")
def flights() -> Flights:
    return simulate_mixed(FAMILIES, 2, seed=5)


def _probe(flight: SimulatedFlight) -> ProbeSamples:
    assert flight.log.probe is not None
    return flight.log.probe


def _coverage_deg(truth: Truth) -> float:
    """360 degrees less the largest gap in the heading of the air velocity, in the air."""
    heading = np.sort(truth.heading_deg[~truth.on_ground])
    if heading.size == 0:
        return 0.0
    gaps = np.diff(np.append(heading, heading[0] + 360.0))
    return 360.0 - float(gaps.max())


def _streams(flight: SimulatedFlight) -> list[object]:
    log = flight.log
    streams = (log.probe, log.static, log.temperature, log.gps, log.attitude, log.load_factor, log.ground_contact)
    return [stream for stream in streams if stream is not None]


@pytest.mark.parametrize("family", FAMILIES)
def test_the_streams_keep_the_contract_of_a_decoded_log(flights: Flights, family: str) -> None:
    for flight in flights[family]:
        assert flight.family == family
        for stream in _streams(flight):
            columns = [getattr(stream, name) for name in stream.__slots__]  # type: ignore[attr-defined]
            arrays: list[FloatArray] = [column for column in columns if isinstance(column, np.ndarray)]
            time_s = arrays[0]
            assert np.all(np.isfinite(time_s))
            assert np.all(np.diff(time_s) > 0.0)
            assert all(array.shape == time_s.shape for array in arrays)
        assert np.all(np.isfinite(_probe(flight).impact_pressure_pa))


@pytest.mark.parametrize("family", FAMILIES)
def test_heading_coverage_decides_which_families_hold_an_answer(flights: Flights, family: str) -> None:
    expected_to_fail = FAMILIES[family].refused and family not in (*FAULTY, "no_fix")
    for flight in flights[family]:
        assert (_coverage_deg(flight.truth) < LEAST_COVERAGE_DEG) == expected_to_fail


@pytest.mark.parametrize("family", [name for name, kind in FAMILIES.items() if not kind.refused])
def test_good_flights_hold_their_speed_and_height_and_state_their_loiters(flights: Flights, family: str) -> None:
    for flight in flights[family]:
        truth = flight.truth
        assert truth.loiters
        assert truth.loiters[-1].end_s <= truth.time_s[-1] + STEP_S
        inside = (truth.time_s >= truth.loiters[0].start_s) & (truth.time_s <= truth.loiters[0].end_s)
        assert np.ptp(truth.height_m[inside]) < 40.0
        assert truth.true_airspeed_mps[inside].std() < 0.08 * truth.true_airspeed_mps[inside].mean()
        assert not truth.on_ground[inside].any()


def test_pairs_of_loiters_turn_both_ways(flights: Flights) -> None:
    for family in ("light", "two_speeds", "shear_drift", "light_aircraft"):
        for flight in flights[family]:
            first, second = flight.truth.loiters
            assert first.direction == -second.direction != 0


def test_families_differ_in_what_their_names_say(flights: Flights) -> None:
    def of(family: str) -> SimulatedFlight:
        return flights[family][0]

    assert of("no_fix").log.gps is not None
    assert of("standard_temperature_only").log.temperature is None
    for family in ("large_zero_no_ground", "large_zero_with_ground", "two_speeds_large_zero"):
        assert not _probe(of(family)).compensated
        assert 60.0 <= of(family).truth.zero_offset_pa <= 120.0
    assert not of("large_zero_no_ground").truth.on_ground.any()
    ground = of("large_zero_with_ground").truth
    assert ground.on_ground[0]
    assert ground.on_ground[-1]
    loiters = of("two_speeds").truth.loiters
    speeds = [
        of("two_speeds")
        .truth.probe_calibrated_airspeed_mps[
            (_probe(of("two_speeds")).time_s > loiter.start_s + 20.0) & (_probe(of("two_speeds")).time_s < loiter.end_s)
        ]
        .mean()
        for loiter in loiters
    ]
    assert sorted(speeds) == pytest.approx([14.5, 22.0], abs=0.8)
    strong = of("strong_wind").truth
    wind = np.hypot(strong.mean_wind_north_mps, strong.mean_wind_east_mps)
    assert wind / strong.true_airspeed_mps.mean() == pytest.approx(0.75, abs=0.06)
    assert of("slow_sensors").truth.gps_delay_s == 0.4
    assert of("light_aircraft").truth.height_m.mean() == pytest.approx(2000.0, abs=20.0)


def test_the_broken_probes_name_their_fault(flights: Flights) -> None:
    for family in FAULTY:
        (fault,) = flights[family][0].faults
        assert fault.fault is FaultKind(family)
        assert fault.start_s <= 10.0


def test_the_same_seed_gives_the_same_flight_in_any_company(flights: Flights) -> None:
    again = simulate("half_circle", 1, seed=5)[0]
    before = flights["half_circle"][0]
    np.testing.assert_allclose(_probe(again).impact_pressure_pa, _probe(before).impact_pressure_pa, atol=1e-3)
    assert again.truth.pressure_scale == before.truth.pressure_scale
    other = simulate("half_circle", 1, seed=6)[0]
    assert other.truth.pressure_scale != before.truth.pressure_scale
    assert flights["half_circle"][1].truth.pressure_scale != before.truth.pressure_scale

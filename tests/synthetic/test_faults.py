"""Each injected fault has the signature of check values, section h, within its span and nowhere else."""

import numpy as np
import pytest

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.log import ProbeSamples
from tests.synthetic.families import simulate_mixed
from tests.synthetic.faults import INJECTORS, inject, random_fault
from tests.synthetic.flight import STEP_S
from tests.synthetic.truth import SimulatedFlight

START_S, END_S = 195.0, 260.0


@pytest.fixture(scope="module")
def clean() -> SimulatedFlight:
    """Its transit between the loiters climbs or descends by 150 m within the span."""
    return simulate_mixed(["shear_drift"], 1, seed=8)["shear_drift"][0]


def _probe(flight: SimulatedFlight) -> ProbeSamples:
    assert flight.log.probe is not None
    return flight.log.probe


def _inside(flight: SimulatedFlight) -> BoolArray:
    time_s = _probe(flight).time_s
    return (time_s >= START_S) & (time_s <= END_S)


def _reading(clean: SimulatedFlight, kind: FaultKind) -> FloatArray:
    return _probe(inject(clean, kind, START_S, END_S)).impact_pressure_pa


def test_every_kind_of_the_contract_can_be_injected() -> None:
    assert set(INJECTORS) == set(FaultKind)


@pytest.mark.parametrize("kind", [kind for kind in FaultKind if kind is not FaultKind.DEAD])
def test_the_flight_names_the_fault_and_is_untouched_outside_its_span(clean: SimulatedFlight, kind: FaultKind) -> None:
    broken = inject(clean, kind, START_S, END_S)
    (fault,) = broken.faults
    assert (fault.fault, fault.start_s, fault.end_s) == (kind, START_S, END_S)
    assert fault.sensor == ("static" if kind is FaultKind.FROZEN_STATIC else "probe")
    assert not clean.faults
    before, after = _probe(clean), _probe(broken)
    outside = ~_inside(clean)
    still = (after.time_s < START_S) | (after.time_s > END_S)
    np.testing.assert_array_equal(after.impact_pressure_pa[still], before.impact_pressure_pa[outside])
    assert broken.truth is clean.truth


def test_frozen_repeats_one_value(clean: SimulatedFlight) -> None:
    assert np.ptp(_reading(clean, FaultKind.FROZEN)[_inside(clean)]) == 0.0


def test_blocked_sinks_to_the_zero_offset(clean: SimulatedFlight) -> None:
    reading = _reading(clean, FaultKind.BLOCKED)[_inside(clean)] - clean.truth.zero_offset_pa
    assert reading[0] > 50.0
    assert np.abs(reading[150:]).max() < 5.0


def test_trapped_follows_the_height(clean: SimulatedFlight) -> None:
    inside = _inside(clean)
    reading = _reading(clean, FaultKind.TRAPPED)[inside]
    height = np.interp(_probe(clean).time_s[inside], clean.truth.time_s, clean.truth.height_m)
    slope = np.polyfit(height, reading, 1)[0] * clean.truth.pressure_scale
    # some 11.9 Pa per metre near the ground, by the density of the day
    assert slope == pytest.approx(11.9, rel=0.12)


def test_swapped_changes_the_sign_of_the_pressure_alone(clean: SimulatedFlight) -> None:
    inside, zero = _inside(clean), clean.truth.zero_offset_pa
    swapped, right = _reading(clean, FaultKind.SWAPPED)[inside], _probe(clean).impact_pressure_pa[inside]
    np.testing.assert_allclose(swapped - zero, -(right - zero))


def test_leak_scales_the_pressure_by_one_factor(clean: SimulatedFlight) -> None:
    inside, zero = _inside(clean), clean.truth.zero_offset_pa
    factor = (_reading(clean, FaultKind.LEAK)[inside] - zero) / (_probe(clean).impact_pressure_pa[inside] - zero)
    assert np.ptp(factor) < 1e-9
    assert 0.80 <= factor[0] <= 0.93


def test_spikes_hit_few_samples_hard(clean: SimulatedFlight) -> None:
    change = np.abs(_reading(clean, FaultKind.SPIKES) - _probe(clean).impact_pressure_pa)[_inside(clean)]
    hit = change > 0.0
    assert 3 <= hit.sum() <= 40
    assert change[hit].min() >= 50.0


def test_saturated_stands_at_the_full_scale_of_the_settings(clean: SimulatedFlight) -> None:
    broken = inject(clean, FaultKind.SATURATED, START_S, END_S)
    full_scale = broken.settings.probe.full_scale_pa
    assert full_scale is not None
    assert np.all(_probe(broken).impact_pressure_pa[_inside(clean)] == full_scale)
    assert full_scale > np.max(_probe(clean).impact_pressure_pa)


def test_dropout_takes_samples_or_their_values(clean: SimulatedFlight) -> None:
    lost = {seed: _probe(inject(clean, FaultKind.DROPOUT, START_S, END_S, seed)) for seed in range(8)}
    taken = [probe.time_s.size < _probe(clean).time_s.size for probe in lost.values()]
    blank = [bool(np.isnan(probe.impact_pressure_pa).any()) for probe in lost.values()]
    assert any(taken)
    assert any(blank)
    assert taken == [not b for b in blank]


def test_dead_is_a_second_sensor_that_the_reader_has_noted(clean: SimulatedFlight) -> None:
    broken = inject(clean, FaultKind.DEAD, START_S, END_S)
    assert [note.dead for note in broken.log.sensors] == [False, True]
    np.testing.assert_array_equal(_probe(broken).impact_pressure_pa, _probe(clean).impact_pressure_pa)


def test_frozen_static_leaves_the_probe_alone(clean: SimulatedFlight) -> None:
    static = inject(clean, FaultKind.FROZEN_STATIC, START_S, END_S).log.static
    assert static is not None
    inside = (static.time_s >= START_S) & (static.time_s <= END_S)
    assert np.ptp(static.static_pressure_pa[inside]) == 0.0


@pytest.mark.parametrize("kind", list(FaultKind))
def test_faults_at_random_lie_in_the_flight_and_repeat_with_their_seed(clean: SimulatedFlight, kind: FaultKind) -> None:
    for seed in range(5):
        first, second = (random_fault(clean, kind, np.random.default_rng(seed)) for _ in range(2))
        assert first.faults == second.faults
        (fault,) = first.faults
        assert 0.0 <= fault.start_s < fault.end_s <= clean.truth.time_s[-1] + STEP_S

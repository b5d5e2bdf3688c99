"""Sensor faults laid onto simulated flights over a known span (signatures: check values, section h)."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from service.domain.arrays import BoolArray, FloatArray
from service.domain.codes import FaultKind
from service.domain.log import ProbeSamples, SensorNote, StaticSamples
from tests.synthetic.truth import SimulatedFlight, TrueFault

DRAIN_TIME_S = (0.5, 2.0)
"""Range of the time constant with which a blocked, drained probe sinks to nothing."""
DRAINED_NOISE_PA = 0.7
LEAK_FACTORS = (0.80, 0.93)
LASTING_S = {
    FaultKind.DROPOUT: (5.0, 30.0),
    FaultKind.SATURATED: (5.0, 30.0),
    FaultKind.SPIKES: (60.0, 120.0),
    FaultKind.FROZEN_STATIC: (30.0, 90.0),
    FaultKind.TRAPPED: (30.0, 90.0),
}
"""Range of the length of a fault at random, where it is not 20 to 60 s."""


@dataclass(frozen=True, slots=True)
class Span:
    start_s: float
    end_s: float

    def holds(self, time_s: FloatArray) -> BoolArray:
        return (time_s >= self.start_s) & (time_s <= self.end_s)


Injector = Callable[[SimulatedFlight, Span, np.random.Generator], SimulatedFlight]


def _probe_of(flight: SimulatedFlight) -> ProbeSamples:
    assert flight.log.probe is not None
    return flight.log.probe


def _mark(flight: SimulatedFlight, kind: FaultKind, sensor: str, span: Span) -> SimulatedFlight:
    return replace(flight, faults=(*flight.faults, TrueFault(kind, sensor, span.start_s, span.end_s)))


def _with_reading(flight: SimulatedFlight, kind: FaultKind, span: Span, reading_pa: FloatArray) -> SimulatedFlight:
    probe = replace(_probe_of(flight), impact_pressure_pa=reading_pa)
    return _mark(replace(flight, log=replace(flight.log, probe=probe)), kind, "probe", span)


def frozen(flight: SimulatedFlight, span: Span, _rng: np.random.Generator) -> SimulatedFlight:
    """The reading repeats the last value before the span, noise and all."""
    probe = _probe_of(flight)
    reading = probe.impact_pressure_pa.copy()
    inside = span.holds(probe.time_s)
    reading[inside] = reading[np.flatnonzero(inside)[0]]
    return _with_reading(flight, FaultKind.FROZEN, span, reading)


def blocked(flight: SimulatedFlight, span: Span, rng: np.random.Generator) -> SimulatedFlight:
    """Ram hole blocked, drain open: the reading sinks to the zero offset within seconds."""
    probe = _probe_of(flight)
    zero = flight.truth.zero_offset_pa
    inside = span.holds(probe.time_s)
    since = probe.time_s[inside] - span.start_s
    reading = probe.impact_pressure_pa.copy()
    first = reading[np.flatnonzero(inside)[0]] - zero
    reading[inside] = zero + first * np.exp(-since / rng.uniform(*DRAIN_TIME_S))
    reading[inside] += rng.normal(0.0, DRAINED_NOISE_PA, since.size)
    return _with_reading(flight, FaultKind.BLOCKED, span, reading)


def trapped(flight: SimulatedFlight, span: Span, rng: np.random.Generator) -> SimulatedFlight:
    """Ram hole and drain blocked: the total pressure of the start is kept, the static pressure goes on."""
    probe, truth = _probe_of(flight), flight.truth
    inside = span.holds(probe.time_s)
    static_pa = np.interp(probe.time_s[inside], truth.time_s, truth.static_pressure_pa)
    reading = probe.impact_pressure_pa.copy()
    first = reading[np.flatnonzero(inside)[0]]
    # the sensor reads pressure differences in the probe's own scale
    reading[inside] = first + (static_pa[0] - static_pa) / truth.pressure_scale
    reading[inside] += rng.normal(0.0, DRAINED_NOISE_PA, static_pa.size)
    return _with_reading(flight, FaultKind.TRAPPED, span, reading)


def swapped(flight: SimulatedFlight, span: Span, _rng: np.random.Generator) -> SimulatedFlight:
    """Tubes swapped: the pressure changes its sign, the zero offset does not."""
    probe, zero = _probe_of(flight), flight.truth.zero_offset_pa
    inside = span.holds(probe.time_s)
    reading = np.where(inside, 2.0 * zero - probe.impact_pressure_pa, probe.impact_pressure_pa)
    return _with_reading(flight, FaultKind.SWAPPED, span, reading)


def leak(flight: SimulatedFlight, span: Span, rng: np.random.Generator) -> SimulatedFlight:
    """The pressure steps down by a factor for the span."""
    probe, zero = _probe_of(flight), flight.truth.zero_offset_pa
    factor = rng.uniform(*LEAK_FACTORS)
    leaking = zero + factor * (probe.impact_pressure_pa - zero)
    reading = np.where(span.holds(probe.time_s), leaking, probe.impact_pressure_pa)
    return _with_reading(flight, FaultKind.LEAK, span, reading)


def spikes(flight: SimulatedFlight, span: Span, rng: np.random.Generator) -> SimulatedFlight:
    """One sample in fifty is off by 50 to 400 Pa."""
    probe = _probe_of(flight)
    hit = span.holds(probe.time_s) & (rng.random(probe.time_s.size) < 0.02)
    size = rng.uniform(50.0, 400.0, hit.size) * rng.choice([-1.0, 1.0], hit.size)
    reading = probe.impact_pressure_pa + np.where(hit, size, 0.0)
    return _with_reading(flight, FaultKind.SPIKES, span, reading)


def saturated(flight: SimulatedFlight, span: Span, _rng: np.random.Generator) -> SimulatedFlight:
    """The sensor reads too much for the span and stands at its full scale, which the settings state."""
    probe = _probe_of(flight)
    inside = span.holds(probe.time_s)
    full_scale = float(np.ceil(1.3 * np.max(np.abs(probe.impact_pressure_pa))))
    reading = np.where(inside, full_scale, probe.impact_pressure_pa)
    settings = replace(flight.settings, probe=replace(flight.settings.probe, full_scale_pa=full_scale))
    return _with_reading(replace(flight, settings=settings), FaultKind.SATURATED, span, reading)


def dropout(flight: SimulatedFlight, span: Span, rng: np.random.Generator) -> SimulatedFlight:
    """The samples of the span are not there, or there without a value: even odds."""
    probe = _probe_of(flight)
    kept = ~span.holds(probe.time_s)
    if rng.random() < 0.5:
        return _with_reading(flight, FaultKind.DROPOUT, span, np.where(kept, probe.impact_pressure_pa, np.nan))
    lost = replace(probe, time_s=probe.time_s[kept], impact_pressure_pa=probe.impact_pressure_pa[kept])
    return _mark(replace(flight, log=replace(flight.log, probe=lost)), FaultKind.DROPOUT, "probe", span)


def dead(flight: SimulatedFlight, _span: Span, _rng: np.random.Generator) -> SimulatedFlight:
    """A second probe sensor is there and dead for the whole flight; the reader has noted it."""
    time_s = _probe_of(flight).time_s
    start_s, end_s = float(time_s[0]), float(time_s[-1])
    live = SensorNote("probe", 0, time_s.size, True, False, "lively and complete", start_s, end_s)
    silent = SensorNote("probe", 1, time_s.size, False, True, "constant reading", start_s, end_s)
    log = replace(flight.log, sensors=(*flight.log.sensors, live, silent))
    return _mark(replace(flight, log=log), FaultKind.DEAD, "probe", Span(start_s, end_s))


def frozen_static(flight: SimulatedFlight, span: Span, _rng: np.random.Generator) -> SimulatedFlight:
    """The static sensor repeats one value; the probe, a sensor of its own, goes on."""
    static = flight.log.static
    assert static is not None
    inside = span.holds(static.time_s)
    pressure = static.static_pressure_pa.copy()
    pressure[inside] = pressure[np.flatnonzero(inside)[0]]
    stuck = StaticSamples(static.time_s, pressure, static.source)
    return _mark(replace(flight, log=replace(flight.log, static=stuck)), FaultKind.FROZEN_STATIC, "static", span)


INJECTORS: dict[FaultKind, Injector] = {
    FaultKind.FROZEN: frozen,
    FaultKind.BLOCKED: blocked,
    FaultKind.TRAPPED: trapped,
    FaultKind.SWAPPED: swapped,
    FaultKind.LEAK: leak,
    FaultKind.SPIKES: spikes,
    FaultKind.SATURATED: saturated,
    FaultKind.DROPOUT: dropout,
    FaultKind.DEAD: dead,
    FaultKind.FROZEN_STATIC: frozen_static,
}
"""One per fault kind of the contract."""


def inject(flight: SimulatedFlight, kind: FaultKind, start_s: float, end_s: float, seed: int = 0) -> SimulatedFlight:
    """The flight with a fault of a kind from `start_s` to `end_s`; `flight.faults` names it."""
    return INJECTORS[kind](flight, Span(start_s, end_s), np.random.default_rng([seed, flight.seed, flight.index]))


def whole_flight(flight: SimulatedFlight) -> Span:
    """Every sample of the probe."""
    time_s = _probe_of(flight).time_s
    return Span(float(time_s[0]), float(time_s[-1]))


def airborne_span(flight: SimulatedFlight, rng: np.random.Generator, shortest_s: float, longest_s: float) -> Span:
    """A span at random within the airborne part of the flight."""
    flying = flight.truth.time_s[~flight.truth.on_ground]
    length = min(rng.uniform(shortest_s, longest_s), 0.8 * float(flying[-1] - flying[0]))
    start = rng.uniform(float(flying[0]), float(flying[-1]) - length)
    return Span(start, start + length)


def random_fault(flight: SimulatedFlight, kind: FaultKind, rng: np.random.Generator) -> SimulatedFlight:
    """A fault of a kind at a random time in the air, as long as such faults last.

    Swapped tubes and a dead second sensor are there from the start; a leak stays once it is there.
    """
    span = airborne_span(flight, rng, *LASTING_S.get(kind, (20.0, 60.0)))
    if kind is FaultKind.SWAPPED:
        span = whole_flight(flight)
    if kind is FaultKind.LEAK:
        flying = flight.truth.time_s[~flight.truth.on_ground]
        quarter = 0.25 * float(flying[-1] - flying[0])
        span = Span(
            rng.uniform(float(flying[0]) + quarter, float(flying[-1]) - quarter), float(flight.truth.time_s[-1])
        )
    return INJECTORS[kind](flight, span, rng)

"""What the service must beat: ordinary least squares, textbook interval and circle-to-circle scatter.

Both fit speed scale and wind to a simulated flight's own samples, with the zero offset and delay that the service used
and the air temperature that it had: measured, or that of the standard atmosphere.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy import stats

from service.airdata.pitot import true_airspeed_from_impact_pressure
from service.domain.arrays import FloatArray
from service.domain.codes import Direction
from service.domain.results import Reduction
from tests.synthetic.air import (
    GAS_CONSTANT,
    GRAVITY,
    LAPSE_K_PER_M,
    SEA_LEVEL_PRESSURE_PA,
    SEA_LEVEL_TEMPERATURE_K,
)
from tests.synthetic.truth import SimulatedFlight

FEWEST_SAMPLES = 12


@dataclass(frozen=True, slots=True)
class Baseline:
    """Relative error of the speed scale and half widths of its intervals; NaN where the method has no answer."""

    error: float
    half_width_95: float
    half_width_68: float


NO_ANSWER = Baseline(float("nan"), float("nan"), float("nan"))


def textbook(flight: SimulatedFlight, reduction: Reduction) -> Baseline:
    """One fit of all samples of the loiters, residuals taken for independent."""
    spans = [(loiter.start_s, loiter.end_s) for loiter in reduction.loiters if loiter.used]
    samples = _samples(flight, reduction, spans)
    if samples is None:
        return NO_ANSWER
    scale, deviation = _least_squares(*samples)
    return Baseline(scale / flight.truth.speed_scale - 1, 1.96 * deviation / scale, deviation / scale)


def circle_by_circle(flight: SimulatedFlight, reduction: Reduction) -> Baseline:
    """One fit of every whole circle, their mean, Student's interval from their scatter."""
    scales = []
    for loiter in reduction.loiters:
        circles = int(loiter.turns) if loiter.direction is not Direction.STRAIGHT and loiter.used else 0
        edges = np.linspace(
            loiter.start_s,
            loiter.start_s + (loiter.end_s - loiter.start_s) * circles / max(loiter.turns, 1),
            circles + 1,
        )
        for start, end in zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True):
            samples = _samples(flight, reduction, [(start, end)])
            if samples is not None:
                scales.append(_least_squares(*samples)[0])
    if len(scales) == 0:
        return NO_ANSWER
    mean = float(np.mean(scales))
    error = mean / flight.truth.speed_scale - 1
    if len(scales) == 1:
        return replace(NO_ANSWER, error=error)
    deviation = float(np.std(scales, ddof=1)) / np.sqrt(len(scales)) / mean
    reach_95, reach_68 = (float(stats.t.isf(0.5 * (1 - level), len(scales) - 1)) for level in (0.95, 0.6827))
    return Baseline(error, reach_95 * deviation, reach_68 * deviation)


def _samples(
    flight: SimulatedFlight, reduction: Reduction, spans: list[tuple[float, float]]
) -> tuple[FloatArray, FloatArray] | None:
    """Probe's airspeed at scale 1, and ground velocity (m, 2), at the GPS samples in the spans."""
    log, zero = flight.log, reduction.calibration.zero_offset_pa
    if log.probe is None or log.gps is None or reduction.airspeed is None or zero is None:
        return None
    delay = reduction.calibration.gps_delay_s
    time_s = log.gps.time_s
    inside = np.zeros(time_s.size, dtype=bool)
    for start, end in spans:
        inside |= (time_s >= start) & (time_s <= end)
    inside &= np.isfinite(log.gps.velocity_north_mps)
    reading = log.probe.impact_pressure_pa
    known = np.isfinite(reading)
    at = time_s[inside] - (delay.value if delay else 0.0)
    pressure = np.interp(at, flight.truth.time_s, flight.truth.static_pressure_pa)
    temperature = _temperature_k(flight, at, pressure)
    impact = np.maximum(np.interp(at, log.probe.time_s[known], reading[known]) - zero.value, 1e-3)
    speed = true_airspeed_from_impact_pressure(impact, pressure, temperature)
    velocity = np.column_stack([log.gps.velocity_north_mps[inside], log.gps.velocity_east_mps[inside]])
    return (speed, velocity) if speed.size >= FEWEST_SAMPLES else None


def _temperature_k(flight: SimulatedFlight, time_s: FloatArray, pressure_pa: FloatArray) -> FloatArray:
    measured = flight.log.temperature
    if measured is not None:
        return np.interp(time_s, measured.time_s, measured.air_temperature_k)
    ratio = pressure_pa / SEA_LEVEL_PRESSURE_PA
    return np.asarray(SEA_LEVEL_TEMPERATURE_K * ratio ** (GAS_CONSTANT * LAPSE_K_PER_M / GRAVITY))


def _least_squares(speed: FloatArray, velocity: FloatArray) -> tuple[float, float]:
    """Speed scale and its textbook deviation: scale * speed = |velocity - wind|, by Gauss-Newton."""
    design = np.column_stack([2 * velocity, np.ones(speed.size)])
    wind = np.linalg.lstsq(design, np.sum(velocity**2, axis=1), rcond=None)[0][:2]
    scale = float(np.mean(np.hypot(*(velocity - wind).T)) / np.mean(speed))
    for _ in range(8):
        air = velocity - wind
        size = np.hypot(*air.T)
        residual = scale * speed - size
        jacobian = np.column_stack([np.full(speed.size, speed.mean()), air / size[:, None]])
        step = np.linalg.lstsq(jacobian, -residual, rcond=None)[0]
        scale, wind = scale + float(step[0]), wind + step[1:]
    variance = float(residual @ residual) / max(speed.size - 3, 1)
    return scale, float(np.sqrt(variance * np.linalg.inv(jacobian.T @ jacobian)[0, 0]))

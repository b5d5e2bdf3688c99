"""Pressures and temperatures of a log file: probe, static, outside air."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.log import ProbeSamples, SensorNote, StaticSamples, TemperatureSamples
from service.readers.plausible import cleaned
from service.readers.ulog_choice import Choice, Rating, choose, rate_values
from service.readers.ulog_fields import AIR_TEMPERATURE_TOPICS, PROBE_TOPICS, STATIC_TOPICS
from service.readers.ulog_recording import Recording, of_topics, since

PROBE_TEMPERATURE_UNCERTAINTY_K = 4.0
"""A sensor inside the probe's housing lies between the air and the warmth of sun and board: some kelvin high."""
HECTOPASCALS = (20.0, 1200.0)
"""Median of a static pressure that is written in hectopascals."""
SENSOR_TEMPERATURE_K = (190.0, 400.0)
"""What the sensor of a working probe can have; placeholders of broken ones lie far outside."""
PLACEHOLDER_SAMPLES = 20
"""This many equal temperatures are a default, not a measurement."""


def choose_probe(found: Sequence[Recording]) -> Choice:
    """The live one of the differential pressure sensors."""
    candidates = [r for r in of_topics(found, PROBE_TOPICS) if "impact_pressure_pa" in r]
    return choose("probe", candidates, _rate_probe)


def _rate_probe(recording: Recording) -> Rating:
    rating = rate_values("impact_pressure_pa", recording.values("impact_pressure_pa"))
    has_temperature = "sensor_temperature_k" in recording
    temperature = recording.values("sensor_temperature_k") if has_temperature else np.empty(0)
    known = temperature[np.isfinite(temperature)]
    if known.size and not SENSOR_TEMPERATURE_K[0] <= np.median(known) <= SENSOR_TEMPERATURE_K[1]:
        return replace(rating, defects=(*rating.defects, "impossible temperature"))
    return rating


def probe_samples(choice: Choice, zero_s: float) -> ProbeSamples | None:
    """The probe's stream: such sensors write their raw reading, zero offset and all."""
    if choice.chosen is None:
        return None
    reading = cleaned("impact_pressure_pa", choice.chosen.values("impact_pressure_pa"))
    return ProbeSamples(since(zero_s, choice.chosen.time_s), reading, choice.source, False, choice.chosen.reordered())


def choose_static(found: Sequence[Recording]) -> Choice:
    """The air data of the recorder, or the live one of its barometers."""
    candidates = [r for r in of_topics(found, STATIC_TOPICS) if "static_pressure_pa" in r]
    return choose(
        "static", candidates, lambda r: rate_values("static_pressure_pa", _pascals(r)), prefer_first_topic=True
    )


def _pascals(recording: Recording) -> FloatArray:
    values = recording.values("static_pressure_pa")
    known = values[np.isfinite(values)]
    if known.size and HECTOPASCALS[0] <= np.median(known) <= HECTOPASCALS[1]:
        return values * 100.0
    return values


def static_samples(choice: Choice, zero_s: float) -> StaticSamples | None:
    """The static pressure's stream."""
    if choice.chosen is None:
        return None
    pressure = cleaned("static_pressure_pa", _pascals(choice.chosen))
    return StaticSamples(since(zero_s, choice.chosen.time_s), pressure, choice.source)


def choose_temperature(found: Sequence[Recording], probe: Recording | None) -> Choice:
    """The temperature beside the airspeed, else the probe's own; never the barometers', which is their board's."""
    beside = [r for r in of_topics(found, AIR_TEMPERATURE_TOPICS) if "air_temperature_k" in r]
    if probe is not None and "sensor_temperature_k" in probe:
        beside.append(probe.renamed("sensor_temperature_k", "air_temperature_k"))
    choice = choose("temperature", beside, _rate_temperature, prefer_first_topic=True, accept_dead=False)
    return replace(choice, notes=(*choice.notes, *_board_notes(found)))


def _rate_temperature(recording: Recording) -> Rating:
    """Unlike a pressure, a temperature may well stand still for a few samples."""
    values = cleaned("air_temperature_k", recording.values("air_temperature_k"))
    known = values[np.isfinite(values)]
    if not known.size:
        return Rating(0, ("no possible value",))
    if known.size >= PLACEHOLDER_SAMPLES and np.ptp(known) == 0.0:
        return Rating(known.size, (f"constant at {known[0]:.4g} K, a placeholder",))
    return Rating(known.size)


def _board_notes(found: Sequence[Recording]) -> list[SensorNote]:
    boards = [r for r in of_topics(found, STATIC_TOPICS) if "board_temperature_k" in r]
    return [
        SensorNote(
            sensor="temperature",
            instance=recording.instance,
            samples=recording.time_s.size,
            chosen=False,
            dead=False,
            reason=f"{recording.topic.words}: temperature of the circuit board, not of the air; not chosen",
            start_s=float(recording.time_s[0]),
            end_s=float(recording.time_s[-1]),
        )
        for recording in boards
    ]


def temperature_samples(choice: Choice, zero_s: float) -> TemperatureSamples | None:
    """The air temperature's stream."""
    if choice.chosen is None:
        return None
    temperature = cleaned("air_temperature_k", choice.chosen.values("air_temperature_k"))
    source = f"{choice.source}: a sensor in the probe"
    return TemperatureSamples(
        since(zero_s, choice.chosen.time_s), temperature, None, source, PROBE_TEMPERATURE_UNCERTAINTY_K
    )

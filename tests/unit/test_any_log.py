"""Whatever a decoded log holds within its contract, a reduction comes back: hostile, tiny and senseless logs.

Values are taken from the whole of what the readers let pass (`service.readers.plausible`), its ends above all.
"""

from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from service.domain.arrays import FloatArray
from service.domain.codes import LogFormat, Verdict
from service.domain.log import (
    AttitudeSamples,
    DecodedLog,
    GpsSamples,
    GroundContactSamples,
    LoadFactorSamples,
    ProbeSamples,
    StaticSamples,
    TemperatureSamples,
)
from service.domain.results import Reduction
from service.domain.settings import Aircraft, Configuration, ProbeSettings, Settings, Window
from service.pipeline import reduce_flight
from service.readers.limits import MAXIMUM_SPAN_S
from service.readers.plausible import POSSIBLE
from tests.unit.flown_circles import Flown, log_of

PLAIN = Settings()
BUSY = Settings(
    aircraft=Aircraft(configurations=(Configuration("clean", stall_speed_mps=11.0),)),
    probe=ProbeSettings(full_scale_pa=500.0),
    loiters=(Window(0.0, 40.0), Window(60.0, 61.0)),
)
SETTINGS = (PLAIN, BUSY, Settings(probe=ProbeSettings(zero_offset_pa=0.0, zero_offset_uncertainty_pa=0.0)))


def assert_whole(answer: Reduction, log: DecodedLog) -> None:
    """An answer keeps its promises whatever it holds."""
    calibration = answer.calibration
    assert isinstance(calibration.verdict, Verdict)
    if calibration.verdict is Verdict.REFUSED:
        assert calibration.reasons
        assert calibration.speed_scale is None
    else:
        for estimate in (calibration.speed_scale, calibration.pressure_scale, calibration.total_speed_scale):
            assert estimate is not None
            assert np.isfinite([estimate.value, estimate.standard_uncertainty, *estimate.interval_95]).all()
            assert 0.0 < estimate.interval_95[0] <= estimate.interval_95[1]
        assert answer.wind is not None
    if log.probe is not None:
        assert answer.airspeed is not None
        assert all(
            getattr(answer.airspeed, field.name).shape == log.probe.time_s.shape for field in fields(answer.airspeed)
        )
        assert not np.isinf(answer.airspeed.true_mps).any()


# --- drawn by a seed: whole logs of noise, with gaps, of any size -----------------------------------------------------

SPREADS = (0.0, 1e-9, 1e-3, 1.0, 30.0, 1e3, 1e6)


class _Draw:
    """Streams of random length, size and gaps; half of them smooth, some constant."""

    def __init__(self, seed: int) -> None:
        self._rng = np.random.default_rng(seed)

    def chance(self, share: float) -> bool:
        return bool(self._rng.random() < share)

    def sound_times(self) -> FloatArray:
        return np.asarray(0.2 * np.arange(self._rng.choice([100, 300, 600])))

    def times(self) -> FloatArray:
        count = int(self._rng.choice([0, 1, 2, 3, 7, 8, 9, 20, 60, 250, 600]))
        step = self._rng.choice([1e-6, 0.01, 0.2, 0.2, 1.0, 50.0])
        start = self._rng.choice([0.0, 0.0, 0.0, -1e4, 1e5])
        times = start + np.cumsum(step * self._rng.uniform(0.2, 1.8, count))
        return np.asarray(np.unique(times))

    def values(self, column: str, count: int, middle: float, spread: float) -> FloatArray:
        shape = self._rng.integers(4)
        if shape == 0:
            values = np.full(count, middle)
        elif shape == 1:
            values = middle + spread * np.sin(np.arange(count) * self._rng.uniform(0.0, 1.0))
        elif shape == 2:
            values = middle + spread * self._rng.normal(0.0, 1.0, count)
        else:
            values = middle + self._rng.normal(0.0, 1.0, count) * self._rng.choice(SPREADS)
        if self.chance(0.3):
            values = np.where(self._rng.random(count) < self._rng.random(), np.nan, values)
        return np.asarray(np.clip(values, *POSSIBLE[column]))

    def maybe(self, column: str, count: int, middle: float, spread: float) -> FloatArray | None:
        return self.values(column, count, middle, spread) if self.chance(0.6) else None

    def log(self) -> DecodedLog:
        common = self.sound_times() if self.chance(0.8) else self.times()

        def times() -> FloatArray:
            return common if self.chance(0.85) else self.times()

        streams: dict[str, Any] = {
            "probe": self._probe(times()),
            "static": self._static(times()) if self.chance(0.6) else None,
            "temperature": self._temperature(times()) if self.chance(0.5) else None,
            "gps": self._gps(times()) if self.chance(0.95) else None,
            "attitude": self._attitude(times()) if self.chance(0.4) else None,
            "load_factor": self._load_factor(times()) if self.chance(0.3) else None,
            "ground_contact": self._contact(times()) if self.chance(0.3) else None,
        }
        return DecodedLog(LogFormat.BATCH, "0" * 64, None, self.chance(0.1), int(self.chance(0.1)), **streams)

    def _probe(self, t: FloatArray) -> ProbeSamples:
        return ProbeSamples(t, self.values("impact_pressure_pa", t.size, 150.0, 60.0), "probe", self.chance(0.7))

    def _static(self, t: FloatArray) -> StaticSamples:
        return StaticSamples(t, self.values("static_pressure_pa", t.size, 95000.0, 50.0), "static")

    def _temperature(self, t: FloatArray) -> TemperatureSamples:
        temperature_k = self.values("air_temperature_k", t.size, 285.0, 5.0)
        return TemperatureSamples(
            t, temperature_k, self.maybe("relative_humidity", t.size, 0.5, 0.3), "thermometer", 1.0
        )

    def _gps(self, t: FloatArray) -> GpsSamples:
        turn = 2.0 * np.pi * (t - (t[0] if t.size else 0.0)) / 30.0
        north, east = 17.0 * np.cos(turn), 17.0 * np.sin(turn)
        if self.chance(0.5):
            north = self.values("velocity_north_mps", t.size, 0.0, 17.0)
            east = self.values("velocity_east_mps", t.size, 0.0, 17.0)
        down = self.maybe("velocity_down_mps", t.size, 0.0, 1.0)
        return GpsSamples(t, north, east, down, None, None, self.maybe("altitude_m", t.size, 300.0, 20.0), None, "GPS")

    def _attitude(self, t: FloatArray) -> AttitudeSamples:
        angles = (self.values(column, t.size, 0.0, 40.0) for column in ("roll_deg", "pitch_deg", "yaw_deg"))
        return AttitudeSamples(t, *angles)

    def _load_factor(self, t: FloatArray) -> LoadFactorSamples:
        return LoadFactorSamples(t, self.values("load_factor", t.size, 1.0, 0.3), "accelerometer")

    def _contact(self, t: FloatArray) -> GroundContactSamples:
        return GroundContactSamples(t, self._rng.random(t.size) < self._rng.random())


@settings(max_examples=80, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(seed=st.integers(0, 2**32 - 1), chosen=st.sampled_from(SETTINGS))
def test_any_log_has_an_answer(seed: int, chosen: Settings) -> None:
    log = _Draw(seed).log()
    assert_whole(reduce_flight(log, chosen), log)


# --- sound flights spoilt ---------------------------------------------------------------------------------------------

SPOILT = {
    "impact_pressure_pa": "probe",
    "static_pressure_pa": "static",
    "air_temperature_k": "temperature",
    "velocity_north_mps": "gps",
    "velocity_down_mps": "gps",
    "altitude_m": "gps",
}


@pytest.mark.parametrize("column", SPOILT)
@pytest.mark.parametrize("wrong", ["low", "high", "nan", "zero"])
@pytest.mark.parametrize("share", [0.02, 0.6, 1.0])
def test_a_column_spoilt(column: str, wrong: str, share: float) -> None:
    low, high = POSSIBLE[column]
    value = {"low": low, "high": high, "nan": np.nan, "zero": np.clip(0.0, low, high)}[wrong]
    log = log_of(Flown(turns=4))
    stream = SPOILT[column]
    samples: Any = getattr(log, stream)
    values = getattr(samples, column).copy()
    values[np.random.default_rng(1).random(values.size) < share] = value
    spoilt = replace(log, **{stream: replace(samples, **{column: values})})
    assert_whole(reduce_flight(spoilt, PLAIN), spoilt)


def test_empty_streams() -> None:
    none = np.empty(0)
    log = DecodedLog(
        format=LogFormat.BATCH,
        sha256="0" * 64,
        start_utc=None,
        truncated=False,
        time_steps_back=0,
        probe=ProbeSamples(none, none, "probe"),
        static=StaticSamples(none, none, "static"),
        temperature=TemperatureSamples(none, none, none, "thermometer", 1.0),
        gps=GpsSamples(none, none, none, none, none, none, none, none, "GPS"),
        attitude=AttitudeSamples(none, none, none, none),
        load_factor=LoadFactorSamples(none, none, "accelerometer"),
        ground_contact=GroundContactSamples(none, none.astype(bool)),
    )
    answer = reduce_flight(log, BUSY)
    assert_whole(answer, log)
    assert answer.calibration.verdict is Verdict.REFUSED


@pytest.mark.parametrize("gap_s", [1e3, 1e5, MAXIMUM_SPAN_S - 300.0])
def test_a_log_with_a_leap_in_time(gap_s: float) -> None:
    log = log_of(Flown(turns=8))
    leap = {}
    for name in ("probe", "static", "temperature", "gps"):
        samples = getattr(log, name)
        leap[name] = replace(samples, time_s=np.where(samples.time_s < 120.0, samples.time_s, samples.time_s + gap_s))
    answer = reduce_flight(replace(log, **leap), PLAIN)
    assert_whole(answer, log)
    assert answer.calibration.verdict is not Verdict.REFUSED


@pytest.mark.parametrize("offset_s", [-1e6, 1.7e9])
def test_a_clock_that_starts_anywhere(offset_s: float) -> None:
    log = log_of(Flown(turns=4))
    moved = {
        name: replace(getattr(log, name), time_s=getattr(log, name).time_s + offset_s)
        for name in ("probe", "static", "temperature", "gps")
    }
    here, there = reduce_flight(log, PLAIN).calibration, reduce_flight(replace(log, **moved), PLAIN).calibration
    assert here.pressure_scale is not None
    assert there.pressure_scale is not None
    assert there.pressure_scale.value == pytest.approx(here.pressure_scale.value, rel=1e-3)

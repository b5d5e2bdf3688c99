"""Logs of real recorders, where they are at hand: read without error, and what stands in them found."""

from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest

from service.domain.log import DecodedLog
from service.readers.registry import read_log

LOGS = Path(__file__).parents[4] / "shared" / "logs"

pytestmark = pytest.mark.skipif(not LOGS.is_dir(), reason="the logs are not part of the project")


def read(name: str) -> DecodedLog:
    return read_log(LOGS / name, sha256="").log


def test_a_flight() -> None:
    log = read("dawn/flight3/flight.ulg")
    assert log.probe is not None
    assert log.gps is not None
    assert log.static is not None
    assert log.temperature is not None
    assert log.load_factor is not None
    assert log.attitude is not None
    assert (log.probe.time_s.size, log.gps.time_s.size, log.static.time_s.size) == (974, 1948, 4872)
    assert log.static.time_s[-1] == pytest.approx(974.0, abs=0.1)
    rest = log.probe.impact_pressure_pa[:400]
    assert np.median(rest) == pytest.approx(115.0, abs=1.0)
    assert not log.probe.compensated
    # the air had 8 to 19 degC, the board 38 to 42
    assert 280.0 < log.temperature.air_temperature_k.min() < log.temperature.air_temperature_k.max() < 292.5
    assert np.median(log.load_factor.load_factor) == pytest.approx(1.0, abs=0.02)
    # the recorder says "landed" throughout, also in flight
    assert log.ground_contact is None
    assert log.start_utc is not None
    assert datetime(2023, 5, 3, 13, 0, tzinfo=UTC) < log.start_utc < datetime(2023, 5, 3, 13, 2, tzinfo=UTC)
    assert not log.truncated


def test_the_same_cut_short() -> None:
    whole, cut = read("dawn/flight3/flight.ulg"), read("dawn/flight3/flight-truncated.ulg")
    assert cut.truncated
    assert cut.probe is not None
    assert whole.probe is not None
    size = cut.probe.time_s.size
    assert size == 603
    np.testing.assert_array_equal(cut.probe.impact_pressure_pa, whole.probe.impact_pressure_pa[:size])


def test_on_the_ground() -> None:
    log = read("dawn/flight1/flight.ulg")
    assert log.probe is not None
    assert log.probe.time_s.size == 173


def test_one_dead_sensor_of_two_and_an_absurd_loss() -> None:
    log = read("format/sample_log_small.ulg")
    notes = [note for note in log.sensors if note.sensor == "probe"]
    assert [(note.chosen, note.dead) for note in notes] == [(True, False), (False, True)]
    assert log.probe is not None
    assert log.probe.impact_pressure_pa.min() > -10.0
    assert log.static is not None
    assert log.static.time_s[-1] < 7.0
    assert sum(gap.end_s - gap.start_s for gap in log.gaps) < 0.1
    assert log.temperature is not None
    assert log.temperature.air_temperature_k.max() < 297.0


def test_a_receiver_that_claims_velocity_without_a_fix() -> None:
    log = read("format/sample_logging_tagged_and_default_params.ulg")
    assert log.gps is not None
    assert np.isnan(log.gps.velocity_north_mps).sum() == 160
    assert log.probe is None
    assert log.temperature is None


@pytest.mark.parametrize("name", ["format/sample.ulg", "format/sample_appended_multiple.ulg"])
def test_neither_probe_nor_gps(name: str) -> None:
    log = read(name)
    assert log.probe is None
    assert log.gps is None
    assert log.attitude is not None
    assert not log.truncated

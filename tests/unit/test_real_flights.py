"""Flights of real recorders through the whole reduction, where their logs are at hand."""

from functools import cache
from pathlib import Path

import numpy as np
import pytest

from service.domain.codes import Flag, Reason, Verdict, ZeroOffsetSource
from service.domain.results import Reduction
from service.domain.settings import Settings
from service.pipeline import reduce_flight
from service.readers.registry import read_log

LOGS = Path(__file__).parents[3] / "shared" / "logs"

pytestmark = pytest.mark.skipif(not LOGS.is_dir(), reason="the logs are not part of the project")


@cache
def reduced(name: str) -> Reduction:
    return reduce_flight(read_log(LOGS / name, sha256="").log, Settings())


def test_three_circles_of_a_solar_aircraft() -> None:
    answer = reduced("dawn/flight3/flight.ulg")
    calibration, wind = answer.calibration, answer.wind
    assert calibration.verdict is Verdict.DOUBTFUL
    assert Reason.INTERVAL_WIDE in {reason.code for reason in calibration.reasons}
    # the notes of the logs: about 115 Pa at rest, three circles of 509, 392 and 460 degrees
    assert calibration.zero_offset_source in (ZeroOffsetSource.GROUND, ZeroOffsetSource.FITTED)
    assert calibration.zero_offset_pa is not None
    assert calibration.zero_offset_pa.value == pytest.approx(115.0, abs=3.0)
    assert len(answer.loiters) == 3
    assert all(loiter.turns * 360.0 > 350.0 for loiter in answer.loiters)
    # one circle at a time 1.14, 1.14, 1.06: 1.11 +- 0.11; not the 0.63 of a forgotten zero
    assert calibration.speed_scale is not None
    low, high = calibration.speed_scale.interval_95
    assert abs(calibration.speed_scale.value - 1.11) < 0.11
    assert low < 1.06
    assert high > 1.10
    assert high - low > 2.0 * calibration.accepted_half_width
    # wind towards north 0.3 to 0.5, east -4.4 to -4.6 m/s
    assert wind is not None
    for estimate, (least, most) in ((wind.north_mps, (0.3, 0.5)), (wind.east_mps, (-4.6, -4.4))):
        assert least - 2.0 * estimate.standard_uncertainty < estimate.value < most + 2.0 * estimate.standard_uncertainty
        assert estimate.standard_uncertainty < 0.5


def test_a_log_cut_in_mid_message() -> None:
    answer = reduced("dawn/flight3/flight-truncated.ulg")
    assert answer.inputs.truncated
    assert Reason.TRUNCATED in {reason.code for reason in answer.calibration.reasons}


def test_a_flight_that_stayed_on_the_ground() -> None:
    answer = reduced("dawn/flight1/flight.ulg")
    assert answer.calibration.verdict is Verdict.REFUSED
    # it rolls at 7 m/s for two minutes, always one way
    assert {reason.code for reason in answer.calibration.reasons} == {Reason.NOT_AIRBORNE}
    assert answer.airspeed is not None
    assert np.all(answer.airspeed.flags & (Flag.UNCALIBRATED | Flag.MISSING) > 0)


@pytest.mark.parametrize("path", sorted((LOGS / "format").glob("*.ulg")), ids=lambda path: str(path.stem))
def test_logs_that_hold_no_fit_are_refused_with_reasons(path: Path) -> None:
    answer = reduced(str(path.relative_to(LOGS)))
    assert answer.calibration.verdict is Verdict.REFUSED
    assert answer.calibration.reasons

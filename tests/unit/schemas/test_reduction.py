"""The answer has the contract's names, never a NaN, and only the parts asked for."""

import dataclasses
import json
from typing import Any

import numpy as np
import pytest

from schemas.fields import flag_lists
from schemas.reduction import dump_reduction
from schemas.wire import encode
from service.domain.codes import CAUTIONS, Flag
from service.domain.results import Reduction
from tests import made

SUMMARY = {
    "calibration",
    "wind",
    "loiters",
    "stall_margins_absent",
    "stall_warnings",
    "faults",
    "inputs",
    "cautions",
    "version",
}


def refuse(token: str) -> None:
    raise AssertionError(f"{token} is not JSON")


def answer(reduction: Reduction, *include: str) -> dict[str, Any]:
    document: dict[str, Any] = json.loads(encode(dump_reduction(reduction, include)), parse_constant=refuse)
    return document


def test_the_summary_alone() -> None:
    assert set(answer(made.reduction())) == SUMMARY


@pytest.mark.parametrize("part", ["airspeed", "stall_margins"])
def test_each_part_is_added(part: str) -> None:
    assert set(answer(made.reduction(), part)) == SUMMARY | {part}


def test_faults_have_words_only_on_demand() -> None:
    span = {"fault": "spikes", "sensor": "probe", "start_s": 1.0, "end_s": 2.0}
    assert answer(made.reduction())["faults"] == [span]
    assert answer(made.reduction(), "faults")["faults"] == [span | {"message": "Three spikes."}]


def test_calibration() -> None:
    calibration = answer(made.reduction())["calibration"]
    assert set(calibration) == {
        "verdict",
        "reasons",
        "speed_scale",
        "pressure_scale",
        "total_speed_scale",
        "accepted_half_width",
        "zero_offset_pa",
        "zero_offset_source",
        "gps_delay_s",
        "airspeed_range_mps",
        "gust_mps",
        "residual_rms_mps",
    }
    assert calibration["verdict"] == "doubtful"
    assert calibration["reasons"] == [{"code": "interval_wide", "message": "The interval is wide."}]
    assert calibration["speed_scale"] == {
        "value": 0.94,
        "standard_uncertainty": 0.01,
        "interval_95": [pytest.approx(0.92), pytest.approx(0.96)],
    }
    assert calibration["zero_offset_source"] == "ground"
    assert calibration["gps_delay_s"] is None
    assert calibration["airspeed_range_mps"] == [15.0, 19.8]
    assert calibration["residual_rms_mps"] is None  # NaN inside


def test_wind() -> None:
    wind = answer(made.reduction())["wind"]
    assert set(wind) == {"north_mps", "east_mps", "speed_mps", "from_deg", "by_loiter"}
    assert wind["east_mps"]["value"] == -4.0
    assert wind["from_deg"] is None
    (loiter,) = wind["by_loiter"]
    assert set(loiter) == {"loiter", "altitude_m", "north_mps", "east_mps", "speed_mps", "from_deg"}
    assert loiter["altitude_m"] is None
    assert loiter["north_mps"]["value"] == 3.0


def test_series() -> None:
    airspeed = answer(made.reduction(), "airspeed")["airspeed"]
    assert set(airspeed) == {
        "time_s",
        "indicated_mps",
        "calibrated_mps",
        "equivalent_mps",
        "true_mps",
        "calibrated_standard_uncertainty_mps",
        "true_standard_uncertainty_mps",
        "flags",
    }
    assert airspeed["time_s"] == [0.1, 0.2, 1 / 3]  # echoed to the last digit
    assert airspeed["true_mps"] == [None, 17.123457, None]
    assert airspeed["flags"] == [["missing"], [], ["extrapolated", "warning"]]


def test_stall() -> None:
    document = answer(made.reduction(), "stall_margins")
    assert set(document["stall_margins"]) == {
        "time_s",
        "load_factor",
        "stall_speed_mps",
        "margin",
        "margin_lower_95",
        "indicated_margin",
        "flags",
    }
    assert document["stall_margins"]["margin"] == [0.5, None, 0.05]
    assert document["stall_margins_absent"] is None
    assert document["stall_warnings"] == [
        {
            "level": "warning",
            "start_s": 0.1,
            "end_s": 0.3,
            "minimum_margin": 0.05,
            "minimum_margin_lower_95": None,
            "indicated_margin": 0.15,
            "load_factor": 1.4,
            "configuration": "clean",
            "message": "Too slow.",
        }
    ]


def test_inputs_loiters_and_constants() -> None:
    document = answer(made.reduction())
    assert set(document["inputs"]) == {field.name for field in dataclasses.fields(made.inputs())}
    assert document["inputs"]["start_utc"] == "2026-05-04T09:12:00Z"
    assert document["inputs"]["samples"] == {"probe": 3, "gps": 2}
    assert document["inputs"]["sensors"][0]["reason"] == "it moves"
    assert document["loiters"][0]["direction"] == "left"
    assert {caution["code"]: caution["message"] for caution in document["cautions"]} == CAUTIONS
    assert set(document["version"]) == {"service", "method"}


def test_a_refused_answer_has_every_field_and_no_object_of_nulls() -> None:
    document = answer(made.refused_reduction(), "airspeed", "stall_margins", "faults")
    assert set(document) == SUMMARY | {"airspeed", "stall_margins"}
    assert document["airspeed"] is None
    assert document["stall_margins"] is None
    assert document["stall_margins_absent"] == "No stall speed is given."
    assert document["calibration"]["speed_scale"] is None
    assert document["wind"] == {
        "north_mps": None,
        "east_mps": None,
        "speed_mps": None,
        "from_deg": None,
        "by_loiter": [],
    }


def test_an_estimate_that_is_not_a_number_is_null() -> None:
    broken = dataclasses.replace(made.calibration(), speed_scale=made.estimate(1.0, float("nan")))
    document = answer(dataclasses.replace(made.reduction(), calibration=broken))
    assert document["calibration"]["speed_scale"] is None


def test_every_flag_has_its_name() -> None:
    masks = np.array([flag.value for flag in Flag], dtype=np.uint32)
    assert flag_lists(masks) == [[str(flag.name).lower()] for flag in Flag]


def test_numpy_scalars_are_written_as_numbers() -> None:
    assert encode([np.float32(0.5), np.int64(3), np.bool_(True), np.float64("nan")]) == b"[0.5,3,true,null]"

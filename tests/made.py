"""A reduction and a flight made by hand, for tests of everything around the computation."""

from datetime import UTC, datetime
from typing import Any

import numpy as np

from service.domain.codes import Direction, FaultKind, Flag, Level, LogFormat, Reason, Verdict, ZeroOffsetSource
from service.domain.log import SensorNote
from service.domain.results import (
    Calibration,
    CorrectedSeries,
    Estimate,
    Fault,
    Inputs,
    Loiter,
    LoiterWind,
    ReasonGiven,
    Reduction,
    StallMargins,
    StallWarning,
    WindEstimate,
)

NAN = float("nan")


def estimate(value: float, uncertainty: float = 0.1) -> Estimate:
    return Estimate(value, uncertainty, (value - 2 * uncertainty, value + 2 * uncertainty))


def wind() -> WindEstimate:
    return WindEstimate(estimate(3.0), estimate(-4.0), estimate(5.0), None)


def calibration() -> Calibration:
    return Calibration(
        verdict=Verdict.DOUBTFUL,
        reasons=(ReasonGiven(Reason.INTERVAL_WIDE, "The interval is wide."),),
        speed_scale=estimate(0.94, 0.01),
        pressure_scale=estimate(0.884, 0.02),
        total_speed_scale=estimate(0.94, 0.01),
        accepted_half_width=0.015,
        zero_offset_pa=estimate(0.8),
        zero_offset_source=ZeroOffsetSource.GROUND,
        gps_delay_s=None,
        airspeed_range_mps=(15.0, 19.8),
        gust_mps=0.7,
        residual_rms_mps=NAN,
    )


def refused_calibration() -> Calibration:
    return Calibration(
        verdict=Verdict.REFUSED,
        reasons=(ReasonGiven(Reason.NO_PROBE, "There is no probe."),),
        speed_scale=None,
        pressure_scale=None,
        total_speed_scale=None,
        accepted_half_width=0.015,
        zero_offset_pa=None,
        zero_offset_source=ZeroOffsetSource.PRIOR,
        gps_delay_s=None,
        airspeed_range_mps=None,
        gust_mps=None,
        residual_rms_mps=None,
    )


def series() -> CorrectedSeries:
    speed = np.array([NAN, 17.123456789, np.inf])
    flags = np.array([Flag.MISSING, 0, Flag.EXTRAPOLATED | Flag.WARNING], dtype=np.uint32)
    return CorrectedSeries(np.array([0.1, 0.2, 1 / 3]), speed, speed, speed, speed, speed, speed, flags)


def margins() -> StallMargins:
    values = np.array([0.5, NAN, 0.05])
    return StallMargins(
        np.array([0.1, 0.2, 1 / 3]), values, values, values, values, values, np.zeros(3, dtype=np.uint32), "bank"
    )


def inputs() -> Inputs:
    note = SensorNote("probe", 0, 3, True, False, "it moves", 0.1, 0.3)
    return Inputs(
        format=LogFormat.BATCH,
        start_utc=datetime(2026, 5, 4, 9, 12, tzinfo=UTC),
        duration_s=0.2,
        samples={"probe": 3, "gps": 2},
        truncated=False,
        sha256="0" * 64,
        probe_source="batch",
        static_source=None,
        temperature_source="standard atmosphere",
        load_factor_source=None,
        sensors=(note,),
    )


def reduction() -> Reduction:
    """A doubtful answer with an entry in every list."""
    warning = StallWarning(Level.WARNING, 0.1, 0.3, 0.05, NAN, 0.15, 1.4, "clean", "Too slow.")
    return Reduction(
        calibration=calibration(),
        wind=wind(),
        wind_by_loiter=(LoiterWind(0, NAN, wind()),),
        loiters=(Loiter(0.0, 180.0, 5.7, Direction.LEFT, 360.0, 17.3, True),),
        airspeed=series(),
        stall_margins=margins(),
        stall_margins_absent=None,
        stall_warnings=(warning,),
        faults=(Fault(FaultKind.SPIKES, "probe", 1.0, 2.0, "Three spikes."),),
        inputs=inputs(),
    )


def refused_reduction() -> Reduction:
    """An answer without a probe: everything that may be None is."""
    return Reduction(
        calibration=refused_calibration(),
        wind=None,
        wind_by_loiter=(),
        loiters=(),
        airspeed=None,
        stall_margins=None,
        stall_margins_absent="No stall speed is given.",
        stall_warnings=(),
        faults=(),
        inputs=inputs(),
    )


def batch(turns: int = 3) -> dict[str, Any]:
    """A JSON batch: circles at 5 Hz in a wind of 3 m/s towards north, noise on the probe alone, and a scale of 1."""
    time_s = np.arange(0.0, 30.0 * turns, 0.2)
    heading = 2 * np.pi * time_s / 30.0
    pressure = 0.5 * 1.225 * 17.0**2 + np.random.default_rng(1).normal(0.0, 1.0, time_s.size)
    return {
        "start_utc": "2026-05-04T09:12:00Z",
        "probe": {"time_s": time_s.tolist(), "impact_pressure_pa": pressure.tolist()},
        "gps": {
            "time_s": time_s.tolist(),
            "velocity_north_mps": (17.0 * np.cos(heading) + 3.0).tolist(),
            "velocity_east_mps": (17.0 * np.sin(heading)).tolist(),
            "velocity_down_mps": [0.0] * time_s.size,
            "altitude_m": [100.0] * time_s.size,
        },
    }

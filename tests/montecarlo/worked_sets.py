"""Joint scale-and-wind sets S1 and S2 of the check values through the whole service, beside their truth."""

from service.domain.results import Estimate, Reduction
from tests.reference.legs import reduce_legs
from tests.reference.test_joint_scale_and_wind import (
    ALTITUDE_M,
    PRESSURE_SCALE,
    S1,
    S2,
    WIND_EAST_MPS,
    WIND_NORTH_MPS,
)

LEG_S = 45.0


def worked_set_rows() -> list[str]:
    """Title and one row per set."""
    truth = f"truth: pressure scale {PRESSURE_SCALE}, wind north {WIND_NORTH_MPS}, east {WIND_EAST_MPS} m/s"
    rows = [f"joint sets of the check values, legs of {LEG_S:.0f} s ({truth})"]
    rows += [f"  {name}: {_told(reduce_legs(legs, ALTITUDE_M, LEG_S))}" for name, legs in (("S1", S1), ("S2", S2))]
    return rows


def _told(reduction: Reduction) -> str:
    scale, wind = reduction.calibration.pressure_scale, reduction.wind
    if scale is None or wind is None:
        return f"{reduction.calibration.verdict} {[str(reason.code) for reason in reduction.calibration.reasons]}"
    return (
        f"{reduction.calibration.verdict}; pressure scale {interval(scale, PRESSURE_SCALE)}; "
        f"north {interval(wind.north_mps, WIND_NORTH_MPS)}; east {interval(wind.east_mps, WIND_EAST_MPS)}"
    )


def interval(estimate: Estimate, truth: float | None = None) -> str:
    """Value and 95 % interval, and whether it holds the truth."""
    low, high = estimate.interval_95
    held = "" if truth is None else (", holds the truth" if low <= truth <= high else ", MISSES the truth")
    return f"{estimate.value:.4f} [{low:.4f}, {high:.4f}]{held}"

"""Verdicts: three conventions of the scale, reasons that weigh and reasons that remark, refusals."""

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from service.domain.codes import Direction, Reason, Verdict, ZeroOffsetSource
from service.domain.results import Calibration, FitResult, FittedPoints, Loiter, ReasonGiven, ZeroOffset
from service.domain.settings import ProbeSettings
from service.reduction.verdict import (
    ACCEPTED_HALF_WIDTH,
    LEAST_COVERAGE_DEG,
    calibration_of,
    coverage_reason,
    refusal_of,
    refused,
)
from tests.unit.reduction.constructed import fit_of, series_of

CIRCLES = (Loiter(0.0, 180.0, 6.0, Direction.LEFT, 360.0, 17.0, True),)
GROUND = ZeroOffset(3.0, 0.2, ZeroOffsetSource.GROUND)


def fit(log_deviation: float = 0.01, zero_deviation_pa: float = 0.2, **changes: Any) -> FitResult:
    """A fit at 17 m/s whose ln(pressure scale) is known to `log_deviation`."""
    speed = np.full(20, 17.0)
    points = FittedPoints(np.arange(20.0), np.zeros(20), np.arange(20.0) * 18.0, speed, speed)
    whole = replace(
        fit_of(1.21, 3.0, ((log_deviation**2, 0.0), (0.0, zero_deviation_pa**2))), points=points, loiters_agree=1.0
    )
    return replace(whole, **changes)


def judged(result: FitResult, settings: ProbeSettings | None = None, **changes: Any) -> Calibration:
    arguments: dict[str, Any] = {
        "series": series_of([170.0] * 10),
        "loiters": CIRCLES,
        "zero": GROUND,
        "remarks": (),
    }
    arguments |= changes
    return calibration_of(result, settings=settings or ProbeSettings(), **arguments)


def codes(calibration: Calibration) -> list[Reason]:
    return [reason.code for reason in calibration.reasons]


def test_a_sure_fit_is_accepted_without_a_word() -> None:
    calibration = judged(fit())
    assert calibration.verdict is Verdict.ACCEPTED
    assert calibration.reasons == ()
    assert refusal_of(fit()) is None


def test_the_three_conventions_of_the_scale_agree() -> None:
    calibration = judged(fit(), ProbeSettings(applied_speed_scale=0.9))
    speed, pressure, total = calibration.speed_scale, calibration.pressure_scale, calibration.total_speed_scale
    assert speed is not None
    assert pressure is not None
    assert total is not None
    assert pressure.value == pytest.approx(1.21)
    assert speed.value == pytest.approx(1.1)
    assert total.value == pytest.approx(0.99)
    # relative uncertainty of a root is half; 95 % ends carry over as they are
    assert pressure.standard_uncertainty == pytest.approx(0.0121)
    assert speed.standard_uncertainty == pytest.approx(0.0055)
    assert speed.interval_95 == pytest.approx([np.sqrt(end) for end in pressure.interval_95])
    assert total.interval_95 == pytest.approx([0.9 * end for end in speed.interval_95])
    assert pressure.interval_95 == pytest.approx([1.21 * np.exp(-0.0196), 1.21 * np.exp(0.0196)])


def test_the_zero_offset_comes_with_its_interval() -> None:
    estimate = judged(fit(zero_deviation_pa=0.5)).zero_offset_pa
    assert estimate is not None
    assert estimate.interval_95 == pytest.approx([3.0 - 0.98, 3.0 + 0.98])


@pytest.mark.parametrize(("share", "verdict"), [(0.98, Verdict.ACCEPTED), (1.02, Verdict.DOUBTFUL)])
def test_the_half_width_decides(share: float, verdict: Verdict) -> None:
    # half width of the speed scale: 1.1 * 0.5 * 1.96 * deviation of ln K
    deviation = share * ACCEPTED_HALF_WIDTH / (1.1 * 0.5 * 1.96)
    calibration = judged(fit(deviation))
    assert calibration.verdict is verdict
    assert (Reason.INTERVAL_WIDE in codes(calibration)) == (verdict is Verdict.DOUBTFUL)
    assert calibration.accepted_half_width == ACCEPTED_HALF_WIDTH


def test_a_larger_coverage_factor_widens_the_interval() -> None:
    assert judged(fit(0.012)).verdict is Verdict.ACCEPTED
    assert judged(fit(0.012, coverage_factor_95=3.0)).verdict is Verdict.DOUBTFUL


@pytest.mark.parametrize(
    ("changes", "advice"),
    [
        ({"log_deviation": 0.05}, "more circles"),
        ({"log_deviation": 0.05, "log_density_uncertainty": 0.045}, "temperature"),
        ({"log_deviation": 0.05, "zero_deviation_pa": 8.0}, "zero offset"),
    ],
)
def test_a_wide_interval_says_what_would_narrow_it(changes: dict[str, float], advice: str) -> None:
    messages = {reason.code: reason.message for reason in judged(fit(**changes)).reasons}
    assert advice in messages[Reason.INTERVAL_WIDE]


def test_remarks_do_not_change_the_verdict() -> None:
    series = series_of([170.0] * 10, standard_static=True, standard_temperature=True)
    few = (replace(CIRCLES[0], turns=1.3),)
    result = fit(zero_offset_source=ZeroOffsetSource.PRIOR)
    remark = ReasonGiven(Reason.TIME_STEPS_BACK, "sorted")
    calibration = judged(result, series=series, loiters=few, remarks=(remark,))
    assert calibration.verdict is Verdict.ACCEPTED
    assert set(codes(calibration)) == {
        Reason.FEW_CIRCLES,
        Reason.ZERO_OFFSET_ASSUMED,
        Reason.STANDARD_TEMPERATURE,
        Reason.STANDARD_STATIC,
        Reason.TIME_STEPS_BACK,
    }


def test_a_scale_that_changed_in_flight_is_doubtful() -> None:
    remark = ReasonGiven(Reason.SCALE_CHANGED, "a leak")
    assert judged(fit(), remarks=(remark,)).verdict is Verdict.DOUBTFUL


def test_loiters_that_contradict_one_another_are_doubtful() -> None:
    calibration = judged(fit(loiters_agree=1e-4))
    assert calibration.verdict is Verdict.DOUBTFUL
    assert codes(calibration) == [Reason.LOITERS_DISAGREE]


def test_legs_are_no_turns() -> None:
    legs = (replace(CIRCLES[0], direction=Direction.STRAIGHT),)
    assert codes(judged(fit(), loiters=legs)) == [Reason.FEW_CIRCLES]


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"converged": False}, Reason.NOT_CONVERGED),
        ({"heading_coverage_deg": LEAST_COVERAGE_DEG - 1.0}, Reason.HEADING_COVERAGE),
        ({"pressure_scale": 0.049}, Reason.SCALE_OUT_OF_RANGE),
        ({"pressure_scale": 5.1}, Reason.SCALE_OUT_OF_RANGE),
        ({"residual_rms_mps": 5.0}, Reason.RESIDUALS),
        ({"log_deviation": 0.5}, Reason.INTERVAL_WIDE),
        ({"log_deviation": float("nan")}, Reason.NOT_CONVERGED),
        ({"log_deviation": float("inf")}, Reason.INTERVAL_WIDE),
    ],
)
def test_a_finished_fit_that_is_no_calibration(changes: dict[str, Any], reason: Reason) -> None:
    refusal = refusal_of(fit(**changes))
    assert refusal is not None
    assert refusal.code is reason
    assert refusal.message


@pytest.mark.parametrize("pressure_scale", [0.05, 0.25, 5.0])
def test_the_limits_of_the_scale_are_included(pressure_scale: float) -> None:
    assert refusal_of(fit(pressure_scale=pressure_scale)) is None


def test_a_refusal_holds_no_number() -> None:
    calibration = refused([coverage_reason(171.6)], ZeroOffsetSource.GROUND)
    assert calibration.verdict is Verdict.REFUSED
    assert calibration.zero_offset_source is ZeroOffsetSource.GROUND
    assert "172°" in calibration.reasons[0].message
    for name in ("speed_scale", "pressure_scale", "total_speed_scale", "zero_offset_pa", "gps_delay_s", "gust_mps"):
        assert getattr(calibration, name) is None

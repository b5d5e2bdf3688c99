from datetime import UTC, datetime

import pytest

from service.fleet.records import FlightFactor

NOW = datetime(2026, 5, 4, tzinfo=UTC)


@pytest.mark.parametrize("log_scale", [float("nan"), float("inf"), -float("inf")])
def test_a_scale_is_finite(log_scale: float) -> None:
    with pytest.raises(ValueError, match="scale of flight A"):
        FlightFactor("A", NOW, log_scale, 0.005)


@pytest.mark.parametrize("uncertainty", [0.0, -0.001, float("nan"), float("inf")])
def test_an_uncertainty_is_above_zero_and_finite(uncertainty: float) -> None:
    with pytest.raises(ValueError, match="uncertainty of flight A"):
        FlightFactor("A", NOW, 0.0, uncertainty)


def test_a_time_has_a_zone() -> None:
    with pytest.raises(ValueError, match="no zone"):
        FlightFactor("A", NOW.replace(tzinfo=None), 0.0, 0.005)

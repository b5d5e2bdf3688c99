"""Samples at even steps."""

import numpy as np
import pytest
from hypothesis import given, strategies
from hypothesis.extra.numpy import arrays

from service.thinning import thinned


def series(times: list[float]) -> dict[str, np.ndarray]:
    time_s = np.array(times)
    return {"time_s": time_s, "value": time_s * 10.0}


def test_nearest_samples_with_joined_flags() -> None:
    """Steps centred on 0, 1, 2, 3; nothing is near 2."""
    columns, flags = thinned(series([0.0, 0.2, 0.8, 1.1, 2.9]), np.array([1, 2, 4, 8, 16], np.uint32), 1.0, 0.0)
    assert columns["time_s"].tolist() == [0.0, 1.1, 2.9]
    assert columns["value"].tolist() == pytest.approx([0.0, 11.0, 29.0])
    assert flags.tolist() == [3, 12, 16]


def test_steps_begin_where_asked() -> None:
    columns, _ = thinned(series([0.0, 0.4, 1.0]), np.zeros(3, np.uint32), 1.0, 0.5)
    assert columns["time_s"].tolist() == [0.4, 1.0]


def test_of_two_as_near_the_earlier() -> None:
    columns, _ = thinned(series([0.75, 1.25]), np.zeros(2, np.uint32), 1.0, 1.0)
    assert columns["time_s"].tolist() == [0.75]


@pytest.mark.parametrize("step_s", [1e-300, 1e-9, 1e300])
def test_steps_of_any_size(step_s: float) -> None:
    columns, _ = thinned(series([1.0, 2.0, 3.0]), np.zeros(3, np.uint32), step_s, 1.0)
    assert columns["time_s"].tolist() == ([1.0] if step_s > 1 else [1.0, 2.0, 3.0])


def test_nothing_stays_nothing() -> None:
    columns, flags = thinned(series([]), np.zeros(0, np.uint32), 1.0, 0.0)
    assert columns["time_s"].size == flags.size == 0


@given(
    arrays(np.float64, strategies.integers(1, 60), elements=strategies.floats(0, 100, width=32), unique=True),
    strategies.floats(0.01, 50),
)
def test_every_sample_is_stood_for(times: np.ndarray, step_s: float) -> None:
    """No flag is lost, rows stay in order, and each is a sample of the series nearest to its step's centre."""
    time_s = np.sort(times)
    flags = (np.uint32(1) << np.arange(time_s.size, dtype=np.uint32) % 31).astype(np.uint32)
    columns, joined = thinned({"time_s": time_s}, flags, step_s, float(time_s[0]))
    shown = columns["time_s"]
    assert np.all(np.diff(shown) > 0)
    assert set(shown) <= set(time_s)
    assert np.bitwise_or.reduce(joined) == np.bitwise_or.reduce(flags)
    centres = time_s[0] + np.round((shown - time_s[0]) / step_s) * step_s
    least = np.array([np.min(np.abs(time_s - centre)) for centre in centres])
    inside = np.abs(shown - centres) < step_s * 0.4999
    assert np.abs(shown - centres)[inside] == pytest.approx(least[inside], abs=1e-9)

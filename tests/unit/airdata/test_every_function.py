"""Rules that every public function of air data keeps: NaN, broadcasting, silence, inputs untouched."""

import inspect
import itertools
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from service.airdata import atmosphere, humidity, pitot, turning_flight, wind_triangle

REASONABLE = {
    "geopotential_altitude_m": 1200.0,
    "geometric_altitude_m": 1200.0,
    "static_pressure_pa": 95000.0,
    "air_temperature_k": 284.0,
    "relative_humidity": 0.6,
    "impact_pressure_pa": 210.0,
    "mach": 0.07,
    "calibrated_airspeed_mps": 19.0,
    "equivalent_airspeed_mps": 19.0,
    "true_airspeed_mps": 20.0,
    "stall_speed_mps": 11.0,
    "speed_mps": 20.0,
    "north_mps": 12.0,
    "east_mps": -9.0,
    "down_mps": 1.5,
    "velocity_north_mps": 12.0,
    "velocity_east_mps": -9.0,
    "wind_north_mps": -2.5,
    "wind_east_mps": 4.0,
    "wind_speed_mps": 6.0,
    "wind_from_deg": 300.0,
    "direction_deg": 40.0,
    "heading_deg": 40.0,
    "track_deg": 40.0,
    "bank_deg": 30.0,
    "turn_rate_dps": 14.0,
    "load_factor": 1.2,
    "mass_ratio": 1.1,
    "mass_kg": 6.0,
    "wing_area_m2": 0.6,
    "lift_coefficient_max": 1.3,
}
HOSTILE = np.array([np.nan, np.inf, -np.inf, 0.0, -0.0, 5e-324, -5e-324, 1e-300, -1.0, 1.0, 1e9, 1.7e308, -1.7e308])

FUNCTIONS = [
    pytest.param(function, id=f"{module.__name__.rpartition('.')[2]}.{name}")
    for module in (atmosphere, humidity, pitot, turning_flight, wind_triangle)
    for name, function in vars(module).items()
    if inspect.isfunction(function) and not name.startswith("_") and function.__module__ == module.__name__
]


def outputs_of(result: Any) -> list[np.ndarray]:
    return [np.asarray(part) for part in (result if isinstance(result, tuple) else (result,))]


def reasonable_arguments(function: Callable[..., Any]) -> dict[str, float]:
    return {name: REASONABLE[name] for name in inspect.signature(function).parameters}


def test_all_functions_are_found() -> None:
    assert len(FUNCTIONS) >= 45


@pytest.mark.parametrize("function", FUNCTIONS)
def test_reasonable_numbers_give_finite_numbers(function: Callable[..., Any]) -> None:
    for output in outputs_of(function(**reasonable_arguments(function))):
        assert output.shape == ()
        assert output.dtype == np.float64
        assert np.isfinite(output)


@pytest.mark.parametrize("function", FUNCTIONS)
def test_nan_in_any_argument_stays_nan(function: Callable[..., Any]) -> None:
    for name in inspect.signature(function).parameters:
        results = outputs_of(function(**(reasonable_arguments(function) | {name: np.nan})))
        assert any(np.isnan(output) for output in results), name
        if name not in {"velocity_north_mps", "velocity_east_mps", "wind_north_mps", "wind_east_mps"}:
            assert all(np.isnan(output) for output in results), name


@pytest.mark.parametrize("function", FUNCTIONS)
def test_a_nan_sample_harms_no_other(function: Callable[..., Any]) -> None:
    arguments = reasonable_arguments(function)
    clean = outputs_of(function(**arguments))
    for name, value in arguments.items():
        mixed = outputs_of(function(**(arguments | {name: np.array([value, np.nan, value])})))
        for output, expected in zip(mixed, clean, strict=True):
            np.testing.assert_array_equal(np.broadcast_to(output, 3)[[0, 2]], [expected, expected])


@pytest.mark.parametrize("function", FUNCTIONS)
def test_arguments_broadcast_and_stay_untouched(function: Callable[..., Any]) -> None:
    arguments = reasonable_arguments(function)
    expected = outputs_of(function(**arguments))
    column, *rest = arguments
    arrays: dict[str, Any] = {column: np.full((4, 1), arguments[column])}
    arrays |= {name: np.full(3, arguments[name]) for name in rest}
    for array in arrays.values():
        array.flags.writeable = False
    wide = {part.shape for part in outputs_of(function(**arrays))}
    assert wide <= {(4, 3), (4, 1), (3,)}
    for output, scalar in zip(outputs_of(function(**arrays)), expected, strict=True):
        np.testing.assert_allclose(output, np.full(output.shape, scalar), rtol=1e-15)
    # lists and whole numbers are taken as well
    as_lists = {name: [value] for name, value in arguments.items()}
    for output, scalar in zip(outputs_of(function(**as_lists)), expected, strict=True):
        assert output.dtype == np.float64
        np.testing.assert_allclose(output, [scalar], rtol=1e-15)


@pytest.mark.parametrize("function", FUNCTIONS)
def test_hostile_numbers_raise_no_warning(function: Callable[..., Any]) -> None:
    # warnings are errors in this suite; underflow to zero is no fault and numpy is silent about it by default
    names = list(inspect.signature(function).parameters)
    values = np.concatenate([HOSTILE, [REASONABLE[name] for name in names]])
    grid = np.meshgrid(*[values] * len(names))
    with np.errstate(divide="warn", over="warn", invalid="warn"):
        for output in outputs_of(function(*grid)):
            assert output.dtype == np.float64


@pytest.mark.parametrize("function", FUNCTIONS)
def test_hostile_scalars_raise_no_warning(function: Callable[..., Any]) -> None:
    names = list(inspect.signature(function).parameters)
    for name, value in itertools.product(names, HOSTILE.tolist()):
        function(**(reasonable_arguments(function) | {name: value}))


@pytest.mark.parametrize("function", FUNCTIONS)
def test_empty_arrays_give_empty_arrays(function: Callable[..., Any]) -> None:
    empty = {name: np.empty(0) for name in inspect.signature(function).parameters}
    assert all(output.shape == (0,) for output in outputs_of(function(**empty)))

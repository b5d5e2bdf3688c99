"""Attitude and load factor in the axes of forward flight."""

import numpy as np
import pytest
from scipy import constants

from service.domain.arrays import FloatArray
from service.readers.body_axes import BLOCK, CONVENTIONAL, LiftAxis, euler_angles, lift_axis, load_factor

LEVEL = np.array([0.0, 0.0, -constants.g])
TAIL_SITTER = LiftAxis(axis=0, sign=-1)


def angles(quaternion: list[float], lift: LiftAxis = CONVENTIONAL) -> tuple[float, float, float]:
    roll, pitch, yaw = euler_angles(lambda _part: [np.array([part]) for part in quaternion], 1, lift)
    return float(roll[0]), float(pitch[0]), float(yaw[0])


@pytest.mark.parametrize(
    ("quaternion", "expected"),
    [
        ([1.0, 0.0, 0.0, 0.0], (0.0, 0.0, 0.0)),
        ([np.sqrt(0.5), 0.0, 0.0, np.sqrt(0.5)], (0.0, 0.0, 90.0)),
        ([np.sqrt(0.5), 0.0, 0.0, -np.sqrt(0.5)], (0.0, 0.0, 270.0)),
        ([np.cos(np.pi / 12), np.sin(np.pi / 12), 0.0, 0.0], (30.0, 0.0, 0.0)),
        ([np.cos(np.pi / 18), 0.0, np.sin(np.pi / 18), 0.0], (0.0, 20.0, 0.0)),
        ([5.0 * np.cos(np.pi / 18), 0.0, 5.0 * np.sin(np.pi / 18), 0.0], (0.0, 20.0, 0.0)),
    ],
    ids=["level", "east", "west", "right bank", "nose up", "not of unit length"],
)
def test_angles_of_simple_rotations(quaternion: list[float], expected: tuple[float, float, float]) -> None:
    assert angles(quaternion) == pytest.approx(expected, abs=1e-9)


def test_a_tail_sitter_in_forward_flight_is_level() -> None:
    # a quarter nose down about the pitch axis
    assert angles([np.sqrt(0.5), 0.0, -np.sqrt(0.5), 0.0], TAIL_SITTER) == pytest.approx((0.0, 0.0, 0.0), abs=1e-9)


def test_a_quaternion_of_zeros_or_nan_has_no_angles() -> None:
    assert np.isnan(angles([0.0, 0.0, 0.0, 0.0])).all()
    assert np.isnan(angles([np.nan, 0.0, 0.0, 0.0])).all()


def test_blocks_join_without_a_seam() -> None:
    size = BLOCK + 10
    yaw = np.linspace(0.0, 350.0, size)
    half = np.radians(yaw) / 2
    parts = [np.cos(half), np.zeros(size), np.zeros(size), np.sin(half)]
    found = euler_angles(lambda part: [values[part] for values in parts], size, CONVENTIONAL)[2]
    np.testing.assert_allclose(found, yaw, atol=1e-9)


@pytest.mark.parametrize(
    ("force", "expected"),
    [
        (LEVEL, CONVENTIONAL),
        (LEVEL + np.array([2.0, 1.0, 0.0]), CONVENTIONAL),
        (-LEVEL, LiftAxis(axis=2, sign=1)),
        (np.array([-constants.g, 0.0, -1.0]), TAIL_SITTER),
        (np.array([constants.g, 0.0, -1.0]), LiftAxis(axis=0, sign=1)),
    ],
    ids=["level", "climbing", "mounted upside down", "tail-sitter", "tail-sitter the other way"],
)
def test_the_lift_axis_carries_the_weight(force: FloatArray, expected: LiftAxis) -> None:
    forces = np.tile(force, (100, 1))
    assert lift_axis(forces) == expected
    assert load_factor(forces[:, expected.axis], expected) == pytest.approx(np.ones(100), abs=0.01)


def test_too_little_motion_tells_no_axis() -> None:
    assert lift_axis(np.tile([-constants.g, 0.0, 0.0], (10, 1))) == CONVENTIONAL
    assert lift_axis(np.full((100, 3), np.nan)) == CONVENTIONAL

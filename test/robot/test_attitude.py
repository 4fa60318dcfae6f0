"""Lean, heading and body rates against Pinocchio's and SciPy's rotations and finite differences."""

import numpy as np
import pinocchio as pin
import pytest
from scipy.spatial.transform import Rotation

from ballbal_ros.robot.attitude import (
    body_rates,
    lean_and_heading,
    lean_and_heading_from_quat_xyzw,
    lean_rates,
    quat_xyzw,
    rotation_heading,
    rotation_lean,
    rotation_rpy,
)

RNG = np.random.default_rng(4)
ANGLES = RNG.uniform(-1.2, 1.2, size=(20, 3)) * np.array([1.0, 1.0, 2.5])


@pytest.mark.parametrize("roll, pitch, heading", ANGLES.tolist())
def test_the_rotation_is_heading_then_pitch_then_roll(roll: float, pitch: float, heading: float):
    """R = Rz(heading) Ry(pitch) Rx(roll), as Pinocchio and SciPy make it, and the angles come back from it."""
    rotation = rotation_heading(heading) @ rotation_lean(np.array([roll, pitch]))
    np.testing.assert_allclose(rotation, pin.rpy.rpyToMatrix(roll, pitch, heading), atol=1e-14)
    np.testing.assert_allclose(rotation, rotation_rpy(np.array([roll, pitch, heading])), atol=1e-14)
    np.testing.assert_allclose(rotation, Rotation.from_euler("xyz", [roll, pitch, heading]).as_matrix(), atol=1e-14)
    np.testing.assert_allclose(lean_and_heading(rotation), (roll, pitch, heading), atol=1e-13)


@pytest.mark.parametrize("roll, pitch, heading", ANGLES.tolist())
def test_quaternions_are_in_ros_order(roll: float, pitch: float, heading: float):
    """x, y, z, w as SciPy and Pinocchio have it, up to the sign that both have free; the angles come back."""
    ours = np.array(quat_xyzw(roll, pitch, heading))
    reference = Rotation.from_euler("xyz", [roll, pitch, heading]).as_quat()
    assert abs(ours @ reference) == pytest.approx(1.0)
    np.testing.assert_allclose(lean_and_heading_from_quat_xyzw(*ours), (roll, pitch, heading), atol=1e-13)
    np.testing.assert_allclose(lean_and_heading_from_quat_xyzw(*(-ours)), (roll, pitch, heading), atol=1e-13)


def test_signs_are_those_of_the_trade():
    """Positive pitch leans forward (+x), positive roll to the right (-y) (physics.md, *Frames*; REP-103)."""
    up = np.array([0.0, 0.0, 1.0])
    assert (rotation_lean(np.array([0.0, 0.1])) @ up)[0] > 0.0
    assert (rotation_lean(np.array([0.1, 0.0])) @ up)[1] < 0.0


def test_rotations_of_stacks_are_those_of_each():
    """A stack of leans gives the stack of their rotations."""
    leans = RNG.uniform(-1, 1, size=(3, 4, 2))
    stack = rotation_lean(leans)
    assert stack.shape == (3, 4, 3, 3)
    np.testing.assert_array_equal(stack[2, 1], rotation_lean(leans[2, 1]))


def motion(t: float, seed: int = 5) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Roll, pitch, heading with their rates and accelerations at t, as cubics."""
    a = np.random.default_rng(seed).normal(size=(4, 3)) * 0.5
    return (
        a[0] + a[1] * t + a[2] * t**2 + a[3] * t**3,
        a[1] + 2 * a[2] * t + 3 * a[3] * t**2,
        2 * a[2] + 6 * a[3] * t,
    )


@pytest.mark.parametrize("t", [-0.4, 0.0, 0.7])
def test_body_rates_are_those_of_the_rotation(t: float):
    """ω = (Rᵀ R')^ and α = ω', by finite differences of the rotation itself; lean_rates is the inverse."""
    angles, rates, accelerations = motion(t)
    ours = body_rates(angles[:2], rates[:2], accelerations[:2], rates[2], accelerations[2])
    h = 1e-5

    def rotation(at: float) -> np.ndarray:
        return rotation_rpy(motion(at)[0])

    spin = rotation(t).T @ (rotation(t + h) - rotation(t - h)) / (2 * h)
    np.testing.assert_allclose(ours.rate, [spin[2, 1], spin[0, 2], spin[1, 0]], atol=1e-8)

    def rate(at: float) -> np.ndarray:
        angles, rates, accelerations = motion(at)
        return body_rates(angles[:2], rates[:2], accelerations[:2], rates[2], accelerations[2]).rate

    np.testing.assert_allclose(ours.acceleration, (rate(t + h) - rate(t - h)) / (2 * h), atol=1e-8)
    np.testing.assert_allclose(lean_rates(angles[:2], ours.rate), rates, atol=1e-13)


def test_derivatives_of_body_rates_are_finite_differences():
    """All six columns of both derivatives agree with finite differences."""
    x, heading = RNG.normal(size=(7, 6)) * 0.6, RNG.normal(size=(7, 2))

    def both(at: np.ndarray) -> np.ndarray:
        rates = body_rates(at[:, :2], at[:, 2:4], at[:, 4:], heading[:, 0], heading[:, 1])
        return np.concatenate((rates.rate, rates.acceleration), axis=1)

    ours = body_rates(x[:, :2], x[:, 2:4], x[:, 4:], heading[:, 0], heading[:, 1])
    for column in range(6):
        step = np.zeros((1, 6))
        step[0, column] = 1e-6
        expected = (both(x + step) - both(x - step)) / 2e-6
        np.testing.assert_allclose(ours.rate_by_lean[..., column], expected[:, :3], atol=1e-8)
        np.testing.assert_allclose(ours.acceleration_by_lean[..., column], expected[:, 3:], atol=1e-8)

"""The rows that weighing is made of."""

from __future__ import annotations

import numpy as np

from ballbal_ros.robot.balance_rows import OutsideMotion, balance_rows
from ballbal_ros.robot.whole_body import WholeBody
from ballbal_ros.weighing.links import Links
from ballbal_ros.weighing.regressor import Motion, balance_regressor, shown_to_true
from helpers.robots import reach, shelver


def test_rows_from_the_regressor_are_the_planners():
    """Pinocchio's regressor times the masses as drawn gives, for wild motions, the balance rows of the planner, which
    are made another way.
    """
    description, count = shelver(), 30
    rng = np.random.default_rng(0)

    def some(*shape: int) -> np.ndarray:
        return 0.3 * rng.standard_normal(shape)

    n = description.joint_count
    motion = Motion(
        *(some(count, 2) for _ in range(3)), some(count), some(count), *(some(count, 2) for _ in range(3)),
        *(some(count, n) for _ in range(3)),
    )  # fmt: skip
    links = Links.of(description)
    found = balance_regressor(description, motion, np.zeros(2)).residual(links.dynamic(np.zeros(links.unknowns)))
    terms = WholeBody(description).terms(motion.arm_position, motion.arm_rate, motion.arm_acceleration)
    none = np.zeros((count, 0, 3))
    outside = OutsideMotion(motion.ball_acceleration, motion.heading_rate, motion.heading_acceleration, none, none)
    lean = motion.lean, motion.lean_rate, motion.lean_acceleration
    radius, apparent = description.parameters.ball.radius, description.ball_apparent_mass
    expected = balance_rows(terms, outside, *lean, radius, apparent).residual
    np.testing.assert_allclose(found, expected, atol=1e-10)


def test_at_rest_in_equilibrium_no_moment_is_left_whatever_the_imu_shows():
    """At the equilibrium lean nothing is left, also when it is shown by a tilted IMU whose tilt is known."""
    description, tilt = shelver(), np.array([0.01, -0.015])
    postures = np.stack((reach().first, reach().last))
    body = WholeBody(description)
    true = np.array([body.posture(posture).equilibrium_lean for posture in postures])
    shown = shown_to_true(true, -tilt)  # to the second order in the tilt
    links = Links.of(description)
    rows = balance_regressor(description, Motion.at_rest(shown, postures), tilt)
    left = rows.residual(links.dynamic(np.zeros(links.unknowns)))
    assert np.abs(left).max() < 1e-3 * np.abs(tilt).max() * body.mass * 9.80665

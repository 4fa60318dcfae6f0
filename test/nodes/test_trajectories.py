"""Trajectory messages: what goes out comes back the same, and what is wrong is refused in one line."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

pytest.importorskip("rclpy")

from builtin_interfaces.msg import Time
from trajectory_msgs.msg import JointTrajectory, JointTrajectoryPoint

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.lean_planner import plan_lean
from ballbal_ros.motion.plan_request import BallMotion, PlanRequest
from ballbal_ros.motion.spline import path_through_waypoints
from ballbal_ros.nodes.lean_trajectory import lean_plan_message, lean_plan_of
from ballbal_ros.nodes.messages import to_duration, to_time
from ballbal_ros.nodes.trajectories import (
    ArmWaypoints,
    ball_motion_of,
    ball_plan_message,
    hand_wrenches_of,
    path_message,
)
from ballbal_ros.robot.whole_body import WholeBody
from helpers.robots import compensation, shelver


def trajectory(names: list[str], *points: tuple[float, list[float]]) -> JointTrajectory:
    """A trajectory of positions at times, s."""
    made = [JointTrajectoryPoint(time_from_start=to_duration(time), positions=values) for time, values in points]
    return JointTrajectory(joint_names=names, points=made)


def test_arm_path_goes_through_a_message_unchanged() -> None:
    """Positions, rates and accelerations at the knots say all there is to say of a path."""
    robot = shelver()
    points = np.zeros((4, robot.joint_count))
    points[1, 3], points[2, 3], points[3, 3] = -0.4, -1.0, -0.8
    path = path_through_waypoints([0.0, 0.7, 1.1, 2.0], points)
    message = path_message(path, robot.joint_names, to_time(3.25))
    still = np.zeros(robot.joint_count)
    back = ArmWaypoints.of(message, robot, "arm_command")
    times = np.linspace(-0.1, 2.1, 221)
    for a, b in zip(path.sample(times), back.path(still, still, still).sample(times), strict=True):
        assert np.abs(a - b).max() < 1e-9
    assert back.start == 3.25


def test_lean_plan_goes_through_a_message_unchanged() -> None:
    """Every number of a lean plan comes back, on the same uniform grid."""
    robot = shelver()
    points = np.zeros((2, robot.joint_count))
    points[1, 0] = -0.5
    request = PlanRequest(path_through_waypoints([0.0, 0.8], points), lead_in=0.5)
    plan = plan_lean(WholeBody(robot), request, compensation())
    back = lean_plan_of(lean_plan_message(plan, to_time(1.0)))
    for name in ("lean", "lean_rate", "lean_acceleration", "ball", "ball_rate", "heading", "torque"):
        assert np.array_equal(getattr(plan, name), getattr(back, name)), name
    assert np.abs(plan.times - back.times).max() < 1e-12


def test_ball_plan_counts_from_where_it_begins() -> None:
    """A roll ahead that begins at heading 90° in odom is a roll along plan axes x, from the ball's own place."""
    message = trajectory(
        ["heading", "ball_x", "ball_y"], (0.0, [math.pi / 2, 1.0, 2.0]), (2.0, [math.pi / 2, 1.0, 2.5])
    )
    motion = ball_motion_of(message, (0.0, 0.0, 0.0))
    assert motion.position[-1] == pytest.approx([0.5, 0.0, 0.0], abs=1e-12)
    assert motion.rate[0] == pytest.approx([0.0, 0.0, 0.0]) and motion.times[-1] == 2.0


def test_ball_plan_comes_back_as_it_was() -> None:
    """A ball motion on the planner's grid survives the message."""
    times = 0.01 * np.arange(201)
    s = times[:, None] / 2.0
    goal = np.array([0.4, -0.2, 0.3])
    position = goal * s**3 * (10 - 15 * s + 6 * s**2)
    rate = goal * 30 * s**2 * (1 - s) ** 2 / 2.0
    acceleration = goal * 60 * s * (1 - s) * (1 - 2 * s) / 4.0
    back = ball_motion_of(ball_plan_message(BallMotion(times, position, rate, acceleration), Time()), (0.0, 0.0, 0.0))
    assert np.abs(np.stack([np.interp(times, back.times, c) for c in back.position.T], axis=1) - position).max() < 1e-9


def test_hand_wrenches_are_sorted_by_hand() -> None:
    """Parts that are named come to their hand and axis, those that are not are zero."""
    points = [JointTrajectoryPoint(time_from_start=to_duration(t), effort=[t, 2.0 * t]) for t in (0.0, 1.0)]
    names = ["right_hand/torque/z", "left_hand/force/x"]
    wrenches = hand_wrenches_of(JointTrajectory(joint_names=names, points=points), ("left_hand", "right_hand"))
    found = {wrench.hand: wrench for wrench in wrenches}
    assert found["left_hand"].force[-1].tolist() == [2.0, 0.0, 0.0] and not found["left_hand"].moment.any()
    assert found["right_hand"].moment[-1].tolist() == [0.0, 0.0, 1.0]


def _arm(message: JointTrajectory) -> Any:
    still = np.zeros(shelver().joint_count)
    return ArmWaypoints.of(message, shelver(), "arm_plan").checked_path(still, still, still)


SHOULDER = ["left_shoulder_pitch"]


@pytest.mark.parametrize(
    ("refused", "words"),
    [
        (lambda: _arm(trajectory(SHOULDER, (1.0, [math.nan]))), "left_shoulder_pitch is nan"),
        (lambda: _arm(trajectory(["left_shouldr_pitch"], (1.0, [0.1]))), "did you mean left_shoulder_pitch"),
        (lambda: _arm(trajectory(SHOULDER, (1.0, [0.1, 0.2]))), "2 positions for 1 joints"),
        (lambda: _arm(trajectory(SHOULDER, (1.0, [0.1]), (0.5, [0.2]))), "times must increase"),
        (
            lambda: _arm(trajectory(SHOULDER, (0.0, [0.4]), (0.5, [0.2]))),
            "begins with left_shoulder_pitch at 0.400 rad",
        ),
        (lambda: _arm(trajectory([*SHOULDER, *SHOULDER], (1.0, [0.1, 0.1]))), "each joint may stand once"),
        (lambda: lean_plan_of(trajectory(["lean_roll"], (0.0, [0.0]))), "it takes lean_roll, lean_pitch"),
        (lambda: ball_motion_of(trajectory(["ball_x"], (1.0, [0.0])), (0, 0, 0)), "it takes ball_x, ball_y, heading"),
        (
            lambda: hand_wrenches_of(JointTrajectory(joint_names=["left_hand/force/w"]), ("left_hand",)),
            "unknown joint name",
        ),
    ],
)
def test_what_is_wrong_is_refused_in_one_line(refused: Callable[[], Any], words: str) -> None:
    """Each refusal is one line that names the topic and what is wrong with it."""
    with pytest.raises(BallbalError) as error:
        refused()
    assert words in str(error.value) and "\n" not in str(error.value)
    assert str(error.value).startswith(("arm_plan", "lean_plan", "ball_plan", "hand_wrench_plan", "plan:"))

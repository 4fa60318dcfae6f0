"""Trajectory messages and core types, each made of the other: arm paths, ball motions, forces on hands.

What comes from outside is checked: finite, complete, known by name. What is wrong raises
:class:`~ballbal_ros.errors.PlanError` that names the topic.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import attrs
import numpy as np
from builtin_interfaces.msg import Time
from trajectory_msgs.msg import JointTrajectory, JointTrajectoryPoint

from ballbal_ros.errors import PlanError, nearest, shown
from ballbal_ros.motion.plan_request import BallMotion, HandWrench
from ballbal_ros.motion.pulls import at_time
from ballbal_ros.motion.spline import LONGEST, ArmPath, path_through_waypoints
from ballbal_ros.nodes.lean_trajectory import Waypoints, column
from ballbal_ros.nodes.messages import seconds, to_duration
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription

BALL_JOINTS = ("ball_x", "ball_y", "heading")
_WRENCH_PARTS = ("force/x", "force/y", "force/z", "torque/x", "torque/y", "torque/z")
_BALL_STEP = 0.01
_STILL = 1e-3
_APART = 0.05


def path_message(path: ArmPath, names: Sequence[str], start: Time) -> JointTrajectory:
    """An arm path as a trajectory with positions, velocities and accelerations at its knots: it can be made from it
    again.
    """
    message = JointTrajectory(joint_names=list(names))
    message.header.stamp = start
    knots = path.knots - path.knots[0]
    positions, rates, accelerations = path.sample(path.knots)
    rates[-1] = 0.0
    for time, position, rate, acceleration in zip(knots.tolist(), positions, rates, accelerations, strict=True):
        message.points.append(
            JointTrajectoryPoint(
                positions=column(position),
                velocities=column(rate),
                accelerations=column(acceleration),
                time_from_start=to_duration(time),
            )
        )
    return message


def ball_motion_of(message: JointTrajectory, place: tuple[float, float, float]) -> BallMotion:
    """The ball motion of a ``ball_plan``, relative to where it begins; ``place`` is (x, y, heading) in ``odom`` before
    it.

    Axes are those of the heading at its beginning. Raises :class:`PlanError` where it can't be read.
    """
    points = Waypoints(message, "ball_plan")
    if sorted(points.names) != sorted(BALL_JOINTS):
        raise PlanError(
            "ball_plan", f"has the joints {', '.join(points.names) or 'none'}", f"it takes {', '.join(BALL_JOINTS)}"
        )
    order = [points.names.index(name) for name in BALL_JOINTS]
    times, positions = points.times, points.positions[:, order]
    rates = [None if row is None else row[order] for row in points.rates]
    accelerations = [None if row is None else row[order] for row in points.accelerations]
    if times[0] > 0.0:
        times, positions = np.concatenate(([0.0], times)), np.vstack((place, positions))
        rates, accelerations = [np.zeros(3), *rates], [np.zeros(3), *accelerations]
    path = path_through_waypoints(times.tolist(), positions, rates, accelerations)
    grid: Array = np.append(np.arange(0.0, path.duration, _BALL_STEP), path.duration)
    position, rate, acceleration = path.sample(grid)
    sin, cos = math.sin(positions[0, 2]), math.cos(positions[0, 2])
    turn = np.array([[cos, -sin, 0.0], [sin, cos, 0.0], [0.0, 0.0, 1.0]])
    return BallMotion(grid, (position - positions[0]) @ turn, rate @ turn, acceleration @ turn)


def ball_plan_message(motion: BallMotion, start: Time) -> JointTrajectory:
    """A ball motion that begins at ``odom``'s origin, heading 0, as a ``ball_plan``."""
    message = JointTrajectory(joint_names=list(BALL_JOINTS))
    message.header.stamp, message.header.frame_id = start, "odom"
    rows = zip(motion.times.tolist(), motion.position, motion.rate, motion.acceleration, strict=True)
    for time, position, rate, acceleration in rows:
        message.points.append(
            JointTrajectoryPoint(
                positions=column(position),
                velocities=column(rate),
                accelerations=column(acceleration),
                time_from_start=to_duration(time),
            )
        )
    return message


def hand_wrenches_of(message: JointTrajectory, hands: Sequence[str]) -> list[HandWrench]:
    """The outside forces and moments of a ``hand_wrench_plan``; times from its own start. Parts not named are zero.

    Between points it is linear, held after the last, and as at the first before it. Raises :class:`PlanError`.
    """
    topic = "hand_wrench_plan"
    known = {f"{hand}/{part}": (hand, column) for hand in hands for column, part in enumerate(_WRENCH_PARTS)}
    for name in message.joint_names:
        if name not in known:
            raise PlanError(topic, f"unknown joint name {name}", nearest(name, known))
    times = np.array([seconds(point.time_from_start) for point in message.points])
    efforts = [np.array(point.effort, float) for point in message.points]
    if any(len(row) != len(message.joint_names) or not np.isfinite(row).all() for row in efforts):
        raise PlanError(
            topic, "a point's effort is not one finite number for each name", "give N for forces, N m for torques"
        )
    if len(times) < 1 or np.any(np.diff(times) <= 0.0):
        raise PlanError(topic, f"has the times {shown(times.tolist())}", "times must increase")
    if (
        abs(times[0]) > LONGEST
        or abs(times[-1]) > LONGEST
        or max(np.abs(row).max(initial=0.0) for row in efforts) > 1e6
    ):
        raise PlanError(topic, "lasts too long, or pulls too hard", f"give at most {LONGEST:g} s and 1e6 N")
    found: dict[str, Array] = {}
    for index, name in enumerate(message.joint_names):
        hand, column = known[name]
        found.setdefault(hand, np.zeros((len(times), 6)))[:, column] = [row[index] for row in efforts]
    return [HandWrench(hand, times, table[:, :3], table[:, 3:]) for hand, table in found.items()]


def hand_wrench_message(wrenches: Sequence[HandWrench], start: Time) -> JointTrajectory:
    """What the world is to exert on the hands as a ``hand_wrench_plan``; negative times are left out, as what they
    lead to is there already.
    """
    names = [f"{wrench.hand}/{part}" for wrench in wrenches for part in _WRENCH_PARTS]
    message = JointTrajectory(joint_names=names)
    message.header.stamp, message.header.frame_id = start, "base_footprint"
    times = np.unique(np.concatenate([wrench.times for wrench in wrenches]).round(9))
    for time in times[times >= 0.0].tolist():
        effort = np.concatenate([np.concatenate(at_time(wrench, time)) for wrench in wrenches])
        point = JointTrajectoryPoint(effort=column(effort), time_from_start=to_duration(time))
        message.points.append(point)
    return message


@attrs.frozen(eq=False)
class ArmWaypoints:
    """The points of an ``arm_plan`` or ``arm_command`` for the joints that it names, checked; start in s."""

    start: float
    points: Waypoints
    columns: tuple[int, ...]

    @classmethod
    def of(cls, message: JointTrajectory, description: RobotDescription, topic: str) -> ArmWaypoints:
        """Read a message; raises :class:`PlanError` or :class:`~ballbal_ros.errors.ModelError` in one line."""
        points = Waypoints(message, topic)
        columns = tuple(description.joint_index(name, topic) for name in points.names)
        if not len(points.times) or not columns:
            raise PlanError(
                topic, f"has {len(points.times)} points for {len(columns)} joints", "give at least one of each"
            )
        return cls(seconds(message.header.stamp), points, columns)

    @property
    def duration(self) -> float:
        """Time of the last point, s."""
        return float(self.points.times[-1])

    def path(self, position: Array, rate: Array, acceleration: Array) -> ArmPath:
        """The path of all joints from a state [n]; joints that are not named stay where they are.

        Where the first point comes later than 0, the path begins in that state. Raises :class:`PlanError`.
        """
        points, columns = self.points, list(self.columns)
        times = points.times
        positions = np.repeat(position[None], len(times), axis=0)
        positions[:, columns] = points.positions
        rates, accelerations = (
            [_whole(row, columns, position) for row in rows] for rows in (points.rates, points.accelerations)
        )
        if times[0] > 0.0:
            times, positions = np.append(0.0, times), np.vstack((position, positions))
            rates, accelerations = [rate, *rates], [acceleration, *accelerations]
        return path_through_waypoints(times.tolist(), positions, rates, accelerations)

    def checked_path(self, position: Array, rate: Array, acceleration: Array) -> ArmPath:
        """:meth:`path`; raises :class:`PlanError` where it would jump: it begins elsewhere, or leaves out a joint that
        moves.
        """
        topic, points, columns = self.points.topic, self.points, list(self.columns)
        others = np.ones(len(position), bool)
        others[columns] = False
        if np.abs(rate[others]).max(initial=0.0) > _STILL:
            raise PlanError(topic, "leaves out joints that move at its start", "name them, or wait until they rest")
        apart = np.abs(points.positions[0] - position[columns])
        if points.times[0] <= 0.0 and apart.max() > _APART:
            worst = int(np.argmax(apart))
            begins, there = points.positions[0][worst], position[columns[worst]]
            what = f"begins with {points.names[worst]} at {begins:.3f} rad, and it will be at {there:.3f}"
            raise PlanError(topic, what, "begin there, or later than 0")
        return self.path(position, rate, acceleration)


def _whole(row: Array | None, columns: list[int], like: Array) -> Array | None:
    if row is None:
        return None
    full = np.zeros_like(like)
    full[columns] = row
    return full

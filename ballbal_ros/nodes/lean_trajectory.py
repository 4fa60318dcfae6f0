"""Lean plans as trajectory messages, and a trajectory's points, checked: all that the balance node needs of them.

(Arm paths and what plans them bring half of SciPy along; the balance node does without.)
"""

from __future__ import annotations

import array
from collections.abc import Iterable, Sequence

import numpy as np
from builtin_interfaces.msg import Time
from trajectory_msgs.msg import JointTrajectory, JointTrajectoryPoint

from ballbal_ros.errors import PlanError
from ballbal_ros.motion.lean_plan import LeanPlan
from ballbal_ros.motion.spline import LONGEST
from ballbal_ros.nodes.messages import seconds, to_duration
from ballbal_ros.robot.arrays import Array

_MOST = 1e6
LEAN_JOINTS = ("lean_roll", "lean_pitch", "heading", "ball_x", "ball_y")


def column(values: Iterable[float]) -> array.array[float]:
    """Numbers as a message takes them at the least cost."""
    return array.array("d", values)


class Waypoints:
    """A trajectory's points, checked: ``times`` [K] s; positions [K, m] and, where given, rates and accelerations of
    ``names``.
    """

    def __init__(self, message: JointTrajectory, topic: str) -> None:
        self.names = tuple(message.joint_names)
        self.topic = topic
        if len(set(self.names)) != len(self.names):
            raise PlanError(topic, f"names {', '.join(self.names)}", "each joint may stand once")
        self.times = np.array([seconds(point.time_from_start) for point in message.points])
        if len(self.times) and self.times[0] < 0.0:
            raise PlanError(topic, f"time_from_start of point 0 is {self.times[0]:g} s", "it takes 0 or more")
        if len(self.times) and self.times.max() > LONGEST:
            raise PlanError(topic, f"lasts {self.times.max():g} s", f"it takes at most {LONGEST:g} s: send it in parts")
        self.positions = np.array([self._row(p.positions, k, "positions") for k, p in enumerate(message.points)])
        self.rates = [self._optional(p.velocities, k, "velocities") for k, p in enumerate(message.points)]
        self.accelerations = [self._optional(p.accelerations, k, "accelerations") for k, p in enumerate(message.points)]

    def _row(self, values: Sequence[float], point: int, what: str) -> Array:
        row = np.array(values, float)
        if row.shape != (len(self.names),):
            raise PlanError(
                self.topic,
                f"point {point} has {len(row)} {what} for {len(self.names)} joints",
                "give one for each joint",
            )
        if not np.isfinite(row).all():
            name = self.names[int(np.argmin(np.isfinite(row)))]
            raise PlanError(
                self.topic,
                f"point {point}: {what} of {name} is {row[np.argmin(np.isfinite(row))]}",
                "give finite numbers",
            )
        if np.abs(row).max(initial=0.0) > _MOST:
            raise PlanError(self.topic, f"point {point}: {what} hold {np.abs(row).max():g}", f"give at most {_MOST:g}")
        return row

    def _optional(self, values: Sequence[float], point: int, what: str) -> Array | None:
        return self._row(values, point, what) if len(values) else None


def lean_plan_message(plan: LeanPlan, start: Time) -> JointTrajectory:
    """A lean plan as a ``lean_plan`` that starts at a stamp."""
    message = JointTrajectory(joint_names=list(LEAN_JOINTS))
    message.header.stamp = start
    message.header.frame_id = "odom"
    columns = [
        np.column_stack((lean, heading, ball))
        for lean, heading, ball in (
            (plan.lean, plan.heading, plan.ball),
            (plan.lean_rate, plan.heading_rate, plan.ball_rate),
            (plan.lean_acceleration, plan.heading_acceleration, plan.ball_acceleration),
        )
    ]
    effort = np.column_stack((plan.torque, np.zeros((len(plan.times), 2))))
    for k, time in enumerate(plan.times.tolist()):
        message.points.append(
            JointTrajectoryPoint(
                positions=column(columns[0][k]),
                velocities=column(columns[1][k]),
                accelerations=column(columns[2][k]),
                effort=column(effort[k]),
                time_from_start=to_duration(time),
            )
        )
    return message


def withdrawal_message(start: Time) -> JointTrajectory:
    """A ``lean_plan`` without points: it takes back the one with this start, should it still wait for its time."""
    message = JointTrajectory(joint_names=list(LEAN_JOINTS))
    message.header.stamp, message.header.frame_id = start, "odom"
    return message


def lean_plan_of(message: JointTrajectory) -> LeanPlan:
    """The lean plan of a ``lean_plan``; raises :class:`PlanError` unless it is complete, finite and on a uniform
    grid.
    """
    topic = "lean_plan"
    points = Waypoints(message, topic)
    if sorted(points.names) != sorted(LEAN_JOINTS):
        raise PlanError(
            topic, f"has the joints {', '.join(points.names) or 'none'}", f"it takes {', '.join(LEAN_JOINTS)}"
        )
    if len(points.times) < 3 or any(row is None for row in (*points.rates, *points.accelerations)):
        raise PlanError(
            topic,
            f"has {len(points.times)} points, or some without rates",
            "give 3 or more, each with velocities and accelerations",
        )
    order = [points.names.index(name) for name in LEAN_JOINTS]
    step = round(float(points.times[-1]) / (len(points.times) - 1), 9)
    times = step * np.arange(len(points.times), dtype=float)
    if step <= 0.0 or np.abs(points.times - times).max() > 1e-6:
        raise PlanError(topic, "its points are not equally far apart in time, from 0 on", "give a uniform grid")
    position, rate, acceleration = (
        np.array(rows)[:, order] for rows in (points.positions, points.rates, points.accelerations)
    )
    torque = _torques(message, [points.names.index(name) for name in LEAN_JOINTS[:3]])
    return LeanPlan(
        times=times, lead_in=0.0,
        lean=position[:, :2], lean_rate=rate[:, :2], lean_acceleration=acceleration[:, :2],
        ball=position[:, 3:], ball_rate=rate[:, 3:], ball_acceleration=acceleration[:, 3:],
        heading=position[:, 2], heading_rate=rate[:, 2], heading_acceleration=acceleration[:, 2],
        torque=torque,
    )  # fmt: skip


def _torques(message: JointTrajectory, order: Sequence[int]) -> Array:
    rows = [np.array(point.effort, float) for point in message.points]
    if any(row.shape != rows[0].shape or len(row) <= max(order) for row in rows):
        raise PlanError("lean_plan", "has points without effort", "give the drive torque about x, y and z in each")
    torque = np.array(rows)[:, list(order)]
    if not np.isfinite(torque).all():
        raise PlanError("lean_plan", "an effort is not finite", "give finite numbers")
    return torque

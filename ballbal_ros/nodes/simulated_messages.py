"""The messages of the simulated robot's sensors, made once and filled anew each tick."""

from __future__ import annotations

import math

import numpy as np
from rclpy.duration import Duration
from rclpy.node import Node

from ballbal_ros.errors import BallbalError, nearest
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.nodes.wire_readers import JointValues
from ballbal_ros.nodes.wire_writers import ClockWriter, ImuWriter, JointStateWriter, OdometryWriter
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.robot import SimulatedRobot

_AT_ONCE = Duration()


class SimulatedMessages:
    """Publishes one instant of a simulated robot: clock, arm joints, drive, IMU last, and what is true for the
    record.
    """

    def __init__(self, node: Node, description: RobotDescription, imu_topic: str) -> None:
        self._drives = description.drive.names
        self._effort: Array = np.zeros(len(self._drives))
        self._oriented = imu_topic == "imu/data"
        self._clock = ClockWriter()
        self._arms = JointStateWriter(description.joint_names, position=True, velocity=True)
        self._drive = JointStateWriter(self._drives, position=True, velocity=True)
        self._imu = ImuWriter(description.parameters.imu.frame, self._oriented)
        self._truth = OdometryWriter("odom", "base_link")
        topics = ("/clock", "joint_states", "drive_states", imu_topic, "ground_truth")
        self._publishers = [publisher(node, topic) for topic in topics]

    def publish(self, robot: SimulatedRobot, ns: int, again: bool = False) -> None:
        """Publish the instant ``ns``, in ns, that the robot has come to; ``again`` where it has been published
        before.

        The record comes once for each instant; but that of t = 0 until it is left, for whoever came to listen.
        """
        measured = robot.measurement()
        arms, drive, imu = self._arms, self._drive, self._imu.values
        arms.position[:], arms.velocity[:] = measured.arm_position, robot.arm_rate
        drive.position[:], drive.velocity[:] = measured.drive_angle, robot.drive_rate
        if self._oriented and measured.imu_quat_xyzw is not None:
            imu[0:4] = measured.imu_quat_xyzw
        imu[13:16], imu[25:28] = measured.imu_rate, measured.imu_acceleration
        for sender, message in zip(self._publishers, (self._clock, arms, drive, self._imu), strict=False):
            sender.publish(message.serialised(ns))
        # The answer is under way: what is for the record only costs no time now.
        if not again or ns == 0:
            self.record(robot, ns)

    def record(self, robot: SimulatedRobot, ns: int) -> None:
        """Publish what is true at the instant ``ns`` that the robot has come to."""
        pose, twist = self._truth.pose, self._truth.twist
        px, py, pz, w, x, y, z = robot.data.qpos[:7].tolist()
        vx, vy, vz, *turning = robot.data.qvel[:6].tolist()
        pose[:] = px, py, pz, x, y, z, w
        # Into the axes of base_link, which a twist is in: v + 2 w (u × v) + 2 u × (u × v) with u = -(x, y, z).
        cx, cy, cz = 2.0 * (z * vy - y * vz), 2.0 * (x * vz - z * vx), 2.0 * (y * vx - x * vy)
        ahead, aside, up = (
            vx + w * cx + z * cy - y * cz,
            vy + w * cy + x * cz - z * cx,
            vz + w * cz + y * cx - x * cy,
        )
        twist[:] = ahead, aside, up, *turning
        self._publishers[-1].publish(self._truth.serialised(ns))

    def recorded(self) -> bool:
        """Whether all that listen have the whole record."""
        return bool(self._publishers[-1].wait_for_all_acked(_AT_ONCE))

    def effort(self, command: JointValues) -> Array:
        """The efforts [n] of a ``drive_command``, N m; raises :class:`BallbalError` unless there is a finite one for
        each actuator.
        """
        names, values = command.names, command.effort
        if names != self._drives:
            for name in names:
                if name not in self._drives:
                    raise BallbalError("drive_command", f"unknown actuator {name}", nearest(name, self._drives))
            missing = [name for name in self._drives if name not in names]
            if missing:
                raise BallbalError(
                    "drive_command", f"has no effort for {', '.join(missing)}", "give one for each actuator"
                )
        if len(values) != len(names):
            raise BallbalError(
                "drive_command", f"has {len(names)} names and {len(values)} efforts", "give one for each actuator"
            )
        if not math.isfinite(values.sum()):
            raise BallbalError("drive_command", f"has the efforts {values.tolist()}", "give finite numbers")
        # What is in force is changed by a good command only.
        self._effort[:] = values if names == self._drives else [values[names.index(name)] for name in self._drives]
        return self._effort

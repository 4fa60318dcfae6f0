"""The messages of the simulated robot's sensors, made once and filled anew each tick."""

from __future__ import annotations

import array
import math
from typing import Any

import numpy as np
from nav_msgs.msg import Odometry
from rclpy.node import Node
from rosgraph_msgs.msg import Clock
from sensor_msgs.msg import Imu, JointState

from ballbal_ros.errors import BallbalError, nearest
from ballbal_ros.nodes.messages import BILLION
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.nodes.wire import JointValues
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.simulation.robot import SimulatedRobot


class SimulatedMessages:
    """Publishes one instant of a simulated robot: clock, arm joints, drive, IMU last, and what is true for the record."""

    def __init__(self, node: Node, description: RobotDescription, imu_topic: str) -> None:
        self._drives = description.drive.names
        self._effort: Array = np.zeros(len(self._drives))
        self._oriented = imu_topic == "imu/data"
        self._clock = Clock()
        self._arms, self._drive = JointState(name=list(description.joint_names)), JointState(name=list(self._drives))
        self._imu = Imu()
        self._imu.header.frame_id = description.parameters.imu.frame
        if not self._oriented:
            self._imu.orientation_covariance[0] = -1.0
        self._truth = Odometry(child_frame_id="base_link")
        self._truth.header.frame_id = "odom"
        topics = ("/clock", "joint_states", "drive_states", imu_topic, "ground_truth")
        self._publishers = [publisher(node, topic) for topic in topics]
        self._stamps = [m.header.stamp for m in (self._arms, self._drive, self._imu, self._truth)] + [self._clock.clock]

    def publish(self, robot: SimulatedRobot, ns: int) -> None:
        """Publish the instant ``ns``, in ns, that the robot has come to."""
        sec, nanosec = divmod(ns, BILLION)
        for stamp in self._stamps:
            stamp.sec, stamp.nanosec = sec, nanosec
        measured = robot.measurement()
        self._arms.position = array.array("d", measured.arm_position)
        self._arms.velocity = array.array("d", robot.arm_rate)
        self._drive.position = array.array("d", measured.drive_angle)
        self._drive.velocity = array.array("d", robot.drive_rate)
        self._fill_imu(measured)
        clock, arms, drive, imu, _ = self._publishers
        clock.publish(self._clock)
        arms.publish(self._arms)
        drive.publish(self._drive)
        imu.publish(self._imu)
        # The answer is under way: what is for the record only costs no time now. Time 0 may be said more than once.
        if ns > 0:
            self.record(robot)

    def record(self, robot: SimulatedRobot) -> None:
        """Publish what is true at the instant that was published last."""
        self._fill_truth(robot)
        self._publishers[-1].publish(self._truth)

    def _fill_imu(self, measured: Any) -> None:
        imu = self._imu
        rate, force, turn = imu.angular_velocity, imu.linear_acceleration, imu.orientation
        rate.x, rate.y, rate.z = measured.imu_rate.tolist()
        force.x, force.y, force.z = measured.imu_acceleration.tolist()
        if self._oriented:
            turn.x, turn.y, turn.z, turn.w = measured.imu_quat_xyzw

    def _fill_truth(self, robot: SimulatedRobot) -> None:
        pose, twist = self._truth.pose.pose, self._truth.twist.twist
        place, turn = pose.position, pose.orientation
        place.x, place.y, place.z = robot.ball_position.tolist()
        x, y, z, w = turn.x, turn.y, turn.z, turn.w = robot.body_quat_xyzw
        vx, vy, vz = robot.ball_velocity.tolist()
        # Into the axes of base_link, which a twist is in: v + 2 w (u × v) + 2 u × (u × v) with u = -(x, y, z).
        cx, cy, cz = 2.0 * (z * vy - y * vz), 2.0 * (x * vz - z * vx), 2.0 * (y * vx - x * vy)
        linear, angular = twist.linear, twist.angular
        linear.x, linear.y, linear.z = (
            vx + w * cx + z * cy - y * cz,
            vy + w * cy + x * cz - z * cx,
            vz + w * cz + y * cx - x * cy,
        )
        angular.x, angular.y, angular.z = robot.body_rate.tolist()

    def effort(self, command: JointValues) -> Array:
        """The efforts [n] of a ``drive_command``, N m; raises :class:`BallbalError` unless there is a finite one for each actuator."""
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
        found = dict(zip(names, values.tolist(), strict=True))
        self._effort[:] = [found[name] for name in self._drives]
        if not math.isfinite(self._effort.sum()):
            raise BallbalError("drive_command", f"has the efforts {self._effort.tolist()}", "give finite numbers")
        return self._effort

"""Node ``whole_body_kinematics``: mass centre and inertia of all that stands on the ball, for everybody who wants to
know.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from builtin_interfaces.msg import Time
from geometry_msgs.msg import InertiaStamped, Point, PointStamped
from rclpy.node import Node
from visualization_msgs.msg import Marker

from ballbal_ros.errors import BallbalError
from ballbal_ros.node_parameters import KinematicsNodeParameters
from ballbal_ros.nodes import process
from ballbal_ros.nodes.diagnostics import OK, WARN, Diagnostics
from ballbal_ros.nodes.messages import BILLION, JointReader, load_of
from ballbal_ros.nodes.parameters import NodeParameters
from ballbal_ros.nodes.stamp_clock import StampClock
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.robot.attitude import rotation_lean
from ballbal_ros.robot.loads import LoadChanges
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.robot.whole_body import Posture, WholeBody


class WholeBodyKinematicsNode(Node):
    """For each joint state, with its stamp: ``center_of_mass``, ``body_inertia``, and more seldom ``com_marker``."""

    def __init__(self) -> None:
        super().__init__("whole_body_kinematics", **process.NODE_OPTIONS)
        parameters = NodeParameters(self, {"robot.yaml": RobotParameters, "node": KinematicsNodeParameters})
        own: KinematicsNodeParameters = parameters["node"]
        self.description = process.describe(self, parameters["robot.yaml"], own.robot_description_wait)
        parameters.declare()
        self._stamp_clock = StampClock(self)
        self._body = WholeBody(self.description)
        self._arms = JointReader(self.description.joint_names, "joint_states")
        self._every = 0 if own.rate <= 0.0 else round(BILLION / own.rate)
        self._marker_every = round(BILLION / own.marker_rate)
        self._last = self._last_marker = -BILLION
        self._loads = LoadChanges()
        self._changed, self._next_load = False, math.inf
        self._center = PointStamped()
        self._inertia = InertiaStamped()
        self._center.header.frame_id = self._inertia.header.frame_id = "base_link"
        self._marker = _marker()
        self._to_center = publisher(self, "center_of_mass")
        self._to_inertia = publisher(self, "body_inertia")
        self._to_marker = publisher(self, "com_marker")
        self._diagnostics = Diagnostics(self, self.description.name, self._report)
        self._diagnostics.inputs.subscribe("hand_load", self._on_load)
        self._diagnostics.inputs.subscribe("joint_states", self._on_joint_states, raw=True)

    def _on_load(self, message: Any) -> None:
        try:
            self._loads.add(*load_of(message, self.description), self._last / BILLION)
        except BallbalError as error:
            self._diagnostics.refuse("hand_load", str(error))
            return
        self._diagnostics.accept("hand_load")
        self._changed = True

    def _on_joint_states(self, raw: bytes) -> None:
        try:
            mine = self._arms.read(raw)
        except BallbalError as error:
            self._diagnostics.refuse("joint_states", str(error))
            return
        now = self._arms.stamp
        # A stamp that went back is that of a robot that was started anew.
        soon = 0 <= now - self._last < self._every
        if not mine or soon or not self._arms.complete:
            return
        self._last = now
        self._stamp_clock.go_to(now)
        time = now / BILLION + 1e-9
        if self._changed or time >= self._next_load:
            for load in self._loads.held_at(time):
                self._body.set_load(load)
            self._changed, self._next_load = False, min((at for at, _ in self._loads.after(time)), default=math.inf)
        self._publish(self._body.posture(self._arms.position), now)

    def _publish(self, posture: Posture, now: int) -> None:
        self._diagnostics.pace.ran(now / BILLION)
        sec, nanosec = divmod(now, BILLION)
        for header in (self._center.header, self._inertia.header):
            header.stamp.sec, header.stamp.nanosec = sec, nanosec
        point, inertia = self._center.point, self._inertia.inertia
        point.x, point.y, point.z = posture.center.tolist()
        inertia.m = posture.mass
        inertia.com.x, inertia.com.y, inertia.com.z = point.x, point.y, point.z
        (inertia.ixx, inertia.ixy, inertia.ixz), (_, inertia.iyy, inertia.iyz), (_, _, inertia.izz) = (
            posture.inertia.tolist()
        )
        self._to_center.publish(self._center)
        self._to_inertia.publish(self._inertia)
        if not 0 <= now - self._last_marker < self._marker_every:
            self._last_marker = now
            self._publish_marker(posture, self._center.header.stamp)

    def _publish_marker(self, posture: Posture, stamp: Time) -> None:
        """The mass centre, and the plumb line of a robot that balances: from it to the ball's centre and the floor."""
        lean = np.array(posture.equilibrium_lean)
        down = rotation_lean(lean).T @ np.array((0.0, 0.0, -self.description.parameters.ball.radius))
        self._marker.header.stamp = stamp
        self._marker.points = [Point(x=x, y=y, z=z) for x, y, z in (posture.center.tolist(), down.tolist())]
        self._to_marker.publish(self._marker)

    def _report(self) -> tuple[bytes, str, Mapping[str, object]]:
        updates = self._diagnostics.pace.count
        values: dict[str, object] = {"mass": self._body.mass}
        missing = [] if math.isfinite(self._arms.position.sum()) else self._arms.missing()
        if missing:
            return WARN, f"joint_states has not told of {', '.join(missing)}", values
        return (OK if updates else WARN), "running" if updates else "no joint_states", values


def _marker() -> Marker:
    marker = Marker(ns="center_of_mass", type=Marker.LINE_STRIP, action=Marker.ADD)
    marker.header.frame_id = "base_link"
    marker.pose.orientation.w = 1.0
    marker.scale.x = 0.01
    marker.color.r, marker.color.g, marker.color.b, marker.color.a = 0.1, 0.5, 0.9, 1.0
    return marker


def main() -> None:
    """Run the node."""
    process.main(WholeBodyKinematicsNode)


if __name__ == "__main__":
    main()

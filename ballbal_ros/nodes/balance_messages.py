"""What the balance node publishes, made once and filled anew: drive command, odometry, its state, and tf where it can
be had.
"""

from __future__ import annotations

import array
import math
from collections.abc import Sequence
from typing import Any

from diagnostic_msgs.msg import DiagnosticStatus
from geometry_msgs.msg import TransformStamped
from nav_msgs.msg import Odometry
from rclpy.node import Node
from std_msgs.msg import Float64MultiArray

from ballbal_ros.balance.guard import BALANCING, ENGAGING, STANDBY, TRIPPED
from ballbal_ros.balance.hand_force import PullWatch
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.nodes.diagnostics import ERROR, OK, WARN, key_values
from ballbal_ros.nodes.messages import BILLION
from ballbal_ros.nodes.topics import publisher
from ballbal_ros.nodes.wire_writers import JointStateWriter
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.attitude import quat_xyzw
from ballbal_ros.robot.description import RobotDescription

try:
    from tf2_msgs.msg import TFMessage
except ImportError:
    TFMessage = None


class BalanceMessages:
    """Publishes for one balance loop. Stamps are in ns."""

    def __init__(self, node: Node, description: RobotDescription, lifespan: float | None) -> None:
        self._radius = description.parameters.ball.radius
        self.torque_limit = description.parameters.limits.drive_torque
        self._command = JointStateWriter(description.drive.names, effort=True)
        self._effort = Float64MultiArray()
        self._odom = Odometry(child_frame_id="base_footprint")
        self._odom.header.frame_id = "odom"
        self._state = DiagnosticStatus(name="balance_state", hardware_id=description.name)
        self._to_drive = publisher(node, "drive_command", lifespan)
        self._to_controllers = publisher(node, "drive_effort", lifespan)
        self._to_odom = publisher(node, "odom")
        self._to_state = publisher(node, "balance_state")
        self._to_tf = None if TFMessage is None else node.create_publisher(TFMessage, "/tf", 100)

    @property
    def has_tf(self) -> bool:
        """Whether this machine has ``tf2_msgs``, so that tf is published."""
        return self._to_tf is not None

    def command(self, ns: int, effort: Array) -> None:
        """Publish efforts [n], N m, that answer the tick ``ns``. What is not finite never gets here: the loop sees to
        it.
        """
        self._command.effort[:] = effort
        self._to_drive.publish(self._command.serialised(ns))
        if self._to_controllers.get_subscription_count() > 0:
            self._effort.data = array.array("d", effort.tobytes())
            self._to_controllers.publish(self._effort)

    def odometry(self, ns: int, loop: BalanceLoop) -> None:
        """Publish where the loop thinks the ball is, and tf down to ``base_link``."""
        odom, ball = self._odom, loop.ball
        stamp, pose, twist = odom.header.stamp, odom.pose.pose, odom.twist.twist
        stamp.sec, stamp.nanosec = divmod(ns, BILLION)
        pose.position.x, pose.position.y = ball.x, ball.y
        pose.orientation.z, pose.orientation.w = math.sin(0.5 * ball.heading), math.cos(0.5 * ball.heading)
        twist.linear.x, twist.linear.y, twist.angular.z = ball.vx, ball.vy, ball.heading_rate
        self._to_odom.publish(odom)
        if self._to_tf is not None:
            self._to_tf.publish(TFMessage(transforms=[self._footprint(), self._body(loop)]))

    def _footprint(self) -> TransformStamped:
        transform = TransformStamped(header=self._odom.header, child_frame_id="base_footprint")
        transform.transform.translation.x = self._odom.pose.pose.position.x
        transform.transform.translation.y = self._odom.pose.pose.position.y
        transform.transform.rotation = self._odom.pose.pose.orientation
        return transform

    def _body(self, loop: BalanceLoop) -> TransformStamped:
        transform = TransformStamped(child_frame_id="base_link")
        transform.header.stamp, transform.header.frame_id = self._odom.header.stamp, "base_footprint"
        transform.transform.translation.z = self._radius
        turn = transform.transform.rotation
        turn.x, turn.y, turn.z, turn.w = quat_xyzw(*loop.lean, 0.0)
        return transform

    def state(self, ns: int, loop: BalanceLoop | None, active: bool, notes: dict[str, str]) -> None:
        """Publish the guard's state at the tick ``ns``; ``notes`` are further values (the plan in force, a refusal)."""
        message = self._state
        sec, nanosec = divmod(max(ns, 0), BILLION)
        values: dict[str, object] = {"stamp": f"{sec}.{nanosec:09d}", **notes}
        if loop is None or not active:
            message.level, message.message = OK, "inactive"
        else:
            guard = loop.guard
            on_the_way = guard.state in (STANDBY, ENGAGING, BALANCING)
            message.level = ERROR if guard.state == TRIPPED else OK if on_the_way else WARN
            message.message = guard.state
            values.update(_values(loop, self.torque_limit))
        message.values = key_values(values)
        self._to_state.publish(message)


def _values(loop: BalanceLoop, torque_limit: float) -> dict[str, Any]:
    (roll, pitch), ball, moment = loop.lean, loop.ball, loop.outside_moment
    return {
        "reason": loop.guard.reason,
        "trim roll": moment[0],
        "trim pitch": moment[1],
        "trim yaw": moment[2],
        "torque reserve": 1.0 - math.hypot(float(loop.torque[0]), float(loop.torque[1])) / torque_limit,
        "lean roll": roll,
        "lean pitch": pitch,
        "ball x": ball.x,
        "ball y": ball.y,
        "heading": ball.heading,
    }


def running_values(loop: BalanceLoop, torque_limit: float, most_torque: float) -> dict[str, Any]:
    """What diagnostics tell of a loop that runs: trim, reserves, what is or was wrong with its inputs.

    ``torque_limit`` of the robot and ``most_torque``, the greatest about a level axis since it was told last, in N m.
    """
    roll, pitch, yaw = loop.outside_moment
    limit = min(torque_limit, loop.parameters.limits.torque) * loop.output.scale
    lost = [loop.description.drive.names[index] for index in sorted(loop.output.lost)]
    return {
        "reason": loop.guard.reason,
        "trim N m": math.hypot(roll, pitch),
        "trim roll": roll,
        "trim pitch": pitch,
        "trim yaw": yaw,
        "torque reserve": 1.0 - most_torque / limit,
        "capture use": loop.judge.capture_use,
        "largest change-over step": loop.change_step,
        **({"actuators lost": ", ".join(lost)} if lost else {}),
        **{f"wrong {name}": what for name, what in loop.watch.troubles(loop.clock.now).items()},
        **{f"seen {name}: {wrong}": count for (name, wrong), count in loop.watch.counts.items()},
    }


def pull_values(watch: PullWatch, hands: Sequence[str]) -> dict[str, object]:
    """What the outside moment amounts to as a horizontal force at each hand, N, if that is what it comes from."""
    found = watch.moment()
    if found is None:
        return {}
    values: dict[str, object] = {}
    for each in (watch.force_of(found, hand) for hand in hands):
        for axis, force, error in zip(("x", "y"), each.force, each.error):
            values[f"pull at {each.hand} {axis} N"] = force
            values[f"pull at {each.hand} {axis} error N"] = error
    return values

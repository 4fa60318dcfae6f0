"""The topics of the stack: name, type and quality of service of each, stated once."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import attrs
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from geometry_msgs.msg import InertiaStamped, PointStamped, PoseStamped, TwistStamped, WrenchStamped
from nav_msgs.msg import Odometry
from rclpy.duration import Duration
from rclpy.node import Node
from rclpy.qos import DurabilityPolicy, QoSCompatibility, QoSProfile, ReliabilityPolicy, qos_check_compatible
from rosgraph_msgs.msg import Clock
from sensor_msgs.msg import Imu, JointState
from std_msgs.msg import Bool, Float64MultiArray, String
from trajectory_msgs.msg import JointTrajectory
from visualization_msgs.msg import Marker


def _profile(depth: int, reliable: bool = True, kept: bool = False) -> QoSProfile:
    return QoSProfile(
        depth=depth,
        reliability=ReliabilityPolicy.RELIABLE if reliable else ReliabilityPolicy.BEST_EFFORT,
        durability=DurabilityPolicy.TRANSIENT_LOCAL if kept else DurabilityPolicy.VOLATILE,
    )


@attrs.frozen
class Kind:
    """How a topic is published and subscribed: depth, whether late joiners get it, whether a subscriber takes
    losses, for which nothing has to be acknowledged (in lock-step an instant that is not answered is said again).
    """

    depth: int
    kept: bool = False
    lossy: bool = False


SENSOR = Kind(1, lossy=True)
COMMAND = Kind(1)
DRIVE_COMMAND = Kind(1, lossy=True)
PLAN = Kind(10, kept=True)
# Whoever is started anew needs to know of all of them, those to come included.
LOADS = Kind(100, kept=True)
JOINTS = Kind(20, lossy=True)
# What was lost on the way is asked for again every 3 s, and must still be there: lock-step may do 2000 steps a second.
RECORD = Kind(20_000)
DESCRIPTION = Kind(1, kept=True)

TOPICS: dict[str, tuple[type, Kind]] = {
    "/clock": (Clock, SENSOR),
    "/diagnostics": (DiagnosticArray, Kind(10)),
    "imu/data": (Imu, SENSOR),
    "imu/data_raw": (Imu, SENSOR),
    "joint_states": (JointState, JOINTS),
    "drive_states": (JointState, SENSOR),
    "drive_command": (JointState, DRIVE_COMMAND),
    "drive_effort": (Float64MultiArray, COMMAND),
    "arm_plan": (JointTrajectory, PLAN),
    "arm_stream": (JointState, JOINTS),
    "ball_plan": (JointTrajectory, PLAN),
    "hand_wrench_plan": (JointTrajectory, PLAN),
    "hand_load": (InertiaStamped, LOADS),
    "hand_load_estimate": (InertiaStamped, PLAN),
    "arm_command": (JointTrajectory, PLAN),
    "lean_plan": (JointTrajectory, PLAN),
    "plan_report": (DiagnosticArray, PLAN),
    "center_of_mass": (PointStamped, SENSOR),
    "body_inertia": (InertiaStamped, SENSOR),
    "com_marker": (Marker, SENSOR),
    "cmd_vel": (TwistStamped, SENSOR),
    "goal_pose": (PoseStamped, PLAN),
    "odom": (Odometry, SENSOR),
    "balance_state": (DiagnosticStatus, PLAN),
    "emergency_stop": (Bool, PLAN),
    "support": (Bool, PLAN),
    "ground_truth": (Odometry, RECORD),
    "push": (WrenchStamped, COMMAND),
    "simulated_load": (InertiaStamped, PLAN),
    "robot_description": (String, DESCRIPTION),
}


def publisher(node: Node, topic: str, lifespan: float | None = None) -> Any:
    """A publisher of a topic of the stack: always reliable; ``lifespan`` in s drops what was not delivered by then."""
    message, kind = TOPICS[topic]
    profile = _profile(kind.depth, kept=kind.kept)
    if lifespan is not None:
        profile.lifespan = Duration(nanoseconds=int(lifespan * 1e9))
    return node.create_publisher(message, topic, profile)


def subscribe(
    node: Node, topic: str, callback: Callable[..., None], *, raw: bool = False, depth: int | None = None
) -> Any:
    """A subscription to a topic of the stack; ``raw``: the callback gets the serialised message; ``depth``: for one who
    wants them all rather than the newest.
    """
    return node.create_subscription(TOPICS[topic][0], topic, callback, wanted(topic, depth), raw=raw)


def wanted(topic: str, depth: int | None = None) -> QoSProfile:
    """The quality of service that a subscriber to a topic of the stack asks for."""
    kind = TOPICS[topic][1]
    return _profile(depth or kind.depth, reliable=not kind.lossy, kept=kind.kept)


def why_unheard(topic: str, offered: QoSProfile) -> str:
    """Why a subscriber to a topic of the stack hears nothing of a publisher that offers it so; "" where it does."""
    verdict, reason = qos_check_compatible(offered, wanted(topic))
    return reason.removeprefix("ERROR: ").rstrip("; ") if verdict == QoSCompatibility.ERROR else ""

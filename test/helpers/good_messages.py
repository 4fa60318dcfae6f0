"""A message in order for each topic that anybody may send: what the hostile ones are made of."""

from __future__ import annotations

from typing import Any

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus, KeyValue
from geometry_msgs.msg import PoseStamped, TwistStamped, WrenchStamped
from nav_msgs.msg import Odometry
from sensor_msgs.msg import JointState
from std_msgs.msg import Bool
from trajectory_msgs.msg import JointTrajectory, JointTrajectoryPoint

from ballbal_ros.nodes.lean_trajectory import LEAN_JOINTS
from ballbal_ros.nodes.messages import load_message, to_duration, to_time
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.rehearsal import RobotFiles


def trajectory(names: list[str], end: list[float], now: float, full: bool = False) -> JointTrajectory:
    """A trajectory from rest at 0 to ``end`` within a second, to start in a while."""
    message = JointTrajectory(joint_names=names)
    message.header.stamp = to_time(now + 3.0)
    for k in range(3):
        point = JointTrajectoryPoint(positions=[0.5 * k * v for v in end], time_from_start=to_duration(0.5 * k))
        if full:
            zero = [0.0] * len(names)
            point.velocities, point.accelerations, point.effort = zero, zero, zero
        message.points.append(point)
    return message


def good_messages(robot: RobotFiles, now: float) -> dict[str, Any]:
    """A message in order for each topic that anybody may send."""
    description = robot.description
    arms, drives = list(description.joint_names), list(description.drive.names)
    moved = ["left_shoulder_pitch", "right_shoulder_pitch"]
    status = DiagnosticStatus(name="balance_state", message="balancing")
    status.values = [KeyValue(key=k, value=v) for k, v in (("plans answered", "1"), ("plan", "1.000000000"))]
    report = DiagnosticStatus(name="arm_plan", values=[KeyValue(key="arm_command", value="7.000000000")])
    twist, goal, push = TwistStamped(), PoseStamped(), WrenchStamped()
    twist.header.frame_id, goal.header.frame_id, push.header.frame_id = "base_footprint", "odom", "base_link"
    twist.twist.linear.x, push.wrench.force.x = 0.1, 1.0
    streamed = JointState(name=moved, position=[0.0, 0.0], velocity=[0.0, 0.0])
    streamed.header.stamp = to_time(now)
    return {
        "arm_stream": streamed,
        "joint_states": JointState(name=arms, position=[0.0] * len(arms)),
        "drive_states": JointState(name=drives, position=[0.0] * len(drives)),
        "drive_command": JointState(name=drives, effort=[0.0] * len(drives)),
        "hand_load": load_message(Load("left_hand", 0.5, [0.0, 0.0, -0.05]), now + 0.5),
        "hand_load_estimate": load_message(Load("right_hand", 0.4, [0.0, 0.0, -0.05]), now + 0.5),
        "simulated_load": load_message(Load("left_hand", 0.5, [0.0, 0.0, -0.05]), now + 0.5),
        "arm_plan": trajectory(moved, [-0.2, -0.2], now),
        "arm_command": trajectory(moved, [-0.2, -0.2], now, full=True),
        "ball_plan": trajectory(["ball_x", "ball_y", "heading"], [0.1, 0.0, 0.0], now),
        "hand_wrench_plan": trajectory(["left_hand/force/x"], [1.0], now, full=True),
        "lean_plan": trajectory(list(LEAN_JOINTS), [0.0] * 5, now, full=True),
        "balance_state": status,
        "plan_report": DiagnosticArray(status=[report]),
        "cmd_vel": twist,
        "goal_pose": goal,
        "push": push,
        "emergency_stop": Bool(data=True),
        "support": Bool(data=True),
        "odom": Odometry(),
    }

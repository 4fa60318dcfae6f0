"""A running stack as its user meets it over the bus: bring it up, ask it for a plan, see what it does."""

from __future__ import annotations

from typing import Any

import numpy as np
from lifecycle_msgs.msg import Transition
from lifecycle_msgs.srv import ChangeState
from trajectory_msgs.msg import JointTrajectory, JointTrajectoryPoint

from ballbal_ros.nodes.messages import seconds, to_duration
from helpers.ros_stack import Listener

SHOULDERS = ["left_shoulder_pitch", "right_shoulder_pitch"]
HEARD = (
    *("joint_states", "odom", "balance_state", "ground_truth", "center_of_mass", "body_inertia"),
    *("lean_plan", "arm_command"),
)


class Robot:
    """The running stack, as a user meets it."""

    def __init__(self, listener: Listener) -> None:
        self.listener = listener
        listener.hear(*HEARD)
        self.reports = listener.record("plan_report")
        self.senders = {
            t: listener.sender(t) for t in ("arm_plan", "hand_load", "cmd_vel", "emergency_stop", "lean_plan")
        }

    def newest(self, topic: str) -> Any:
        return self.listener.newest(topic)

    @property
    def time(self) -> float:
        return seconds(self.newest("joint_states").header.stamp)

    @property
    def state(self) -> str:
        said = self.newest("balance_state")
        return str(said.message) if said is not None else ""

    def bring_up(self) -> None:
        """Configure and activate the balance, and wait until the stand has let go."""

        def change(transition: int) -> bool:
            request = ChangeState.Request(transition=Transition(id=transition))
            return bool(self.listener.call(ChangeState, "balance/change_state", request).success)

        self.listener.wait(lambda: self.newest("joint_states") is not None, 30.0, "a simulated robot")
        self.listener.wait(lambda: change(Transition.TRANSITION_CONFIGURE), 30.0, "configuring")
        assert change(Transition.TRANSITION_ACTIVATE)
        self.listener.wait(lambda: self.state == "balancing", 30.0, "balancing")

    def go_on(self, span: float) -> None:
        """Let simulated time go by, s."""
        until = self.time + span
        self.listener.wait(lambda: self.time >= until, 30.0, f"{span} s of simulated time")

    def ask(self, message: JointTrajectory) -> Any:
        """Send an arm plan and return the answer."""
        count = len(self.reports)
        self.senders["arm_plan"].publish(message)
        self.listener.wait(lambda: len(self.reports) > count, 20.0, "plan_report")
        return self.reports[-1].status[0]

    def angle(self, joint: str) -> float:
        states = self.newest("joint_states")
        return float(states.position[list(states.name).index(joint)])

    def ball(self) -> np.ndarray:
        at = self.newest("ground_truth").pose.pose.position
        return np.array((at.x, at.y))


def plan(names: list[str], *points: tuple[float, list[float]]) -> JointTrajectory:
    """An arm plan, as soon as possible."""
    made = [JointTrajectoryPoint(time_from_start=to_duration(time), positions=values) for time, values in points]
    return JointTrajectory(joint_names=names, points=made)

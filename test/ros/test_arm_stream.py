"""Arms that are streamed over the bus: they follow the stream a delay later, and lean plans come all the while."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

pytest.importorskip("rclpy")

from lifecycle_msgs.msg import Transition
from lifecycle_msgs.srv import ChangeState
from rclpy.serialization import deserialize_message
from sensor_msgs.msg import JointState

from ballbal_ros.nodes.diagnostics import values_of
from ballbal_ros.nodes.messages import seconds, to_time
from ballbal_ros.nodes.topics import TOPICS
from helpers.ros_stack import Listener, listening, running_stack

JOINTS = ["left_shoulder_pitch", "right_shoulder_pitch"]
DELAY, RESTS, MOVES, ANGLE = 0.8, 0.6, 1.5, -0.5


def smooth(since: float) -> tuple[float, float]:
    """Angle and rate of a swing that begins at 0, s."""
    s = min(max(since / MOVES, 0.0), 1.0)
    return ANGLE * s**3 * (10 - 15 * s + 6 * s * s), ANGLE * 30 * s * s * (1 - s) ** 2 / MOVES


class Operator:
    """Streams a swing of both shoulders, by the robot's own time."""

    def __init__(self, listener: Listener) -> None:
        self.listener = listener
        listener.hear("joint_states", "balance_state", "/diagnostics")
        self.diag = listener.record("/diagnostics")
        self.plans, self.truth = listener.record("lean_plan", raw=True), listener.record("ground_truth", raw=True)
        self.sender = listener.sender("arm_stream")

    @property
    def time(self) -> float:
        said = self.listener.newest("joint_states")
        return -1.0 if said is None else seconds(said.header.stamp)

    @property
    def state(self) -> str:
        said = self.listener.newest("balance_state")
        return "" if said is None else said.message

    def send(self, now: float, angle: float, rate: float) -> None:
        message = JointState(name=JOINTS, position=[angle] * 2, velocity=[rate] * 2)
        message.header.stamp = to_time(now)
        self.sender.publish(message)

    def angle(self) -> float:
        said = self.listener.newest("joint_states")
        return float(said.position[list(said.name).index(JOINTS[0])])

    def bring_up(self) -> None:
        listener = self.listener
        listener.wait(lambda: self.time >= 0.0, what="joint_states")
        for transition in (Transition.TRANSITION_CONFIGURE, Transition.TRANSITION_ACTIVATE):
            request = ChangeState.Request(transition=Transition(id=transition))
            listener.wait(
                lambda request=request: listener.call(ChangeState, "balance/change_state", request).success, 30.0
            )
        listener.wait(lambda: self.state == "balancing", 60.0, "balancing")
        listener.wait(lambda: self.sender.get_subscription_count() > 0, what="arm_compensation")

    def stream(self) -> tuple[float, float]:
        """Stream the swing, and wait until the ball is home; when it began and when it was over, s."""
        begin = self.time + 0.2
        sent, end = -1.0, begin + RESTS + MOVES + DELAY + 1.8
        while self.time < end:
            now = self.time
            if begin <= now < begin + RESTS + MOVES + 0.2 and now >= sent + 0.01:
                sent = now
                self.send(now, *smooth(now - begin - RESTS))
            self.listener.turn(0.002)
        return begin, end


def test_streamed_arms_follow_and_it_stays_up(ros_domain_id: int) -> None:
    """The swing is done a delay later, lean plans come again and again while it lasts, and it stays up.

    How many come in the simulated second, and in time, depends on the machine, as simulated time does not wait for
    them. So what is held here is coarse; the travel itself is tested in-process.
    """
    changes = [("arm_compensation", {"stream__delay": DELAY, "stream__latency": 0.2, "stream__interval": 0.08})]
    with running_stack(ros_domain_id, {"duration": 0.0}, changes) as processes, listening(ros_domain_id) as listener:
        listener.watched = processes
        operator = Operator(listener)
        operator.bring_up()
        begin, end = operator.stream()
        check(operator, begin, end)


def check(operator: Operator, begin: float, end: float) -> None:
    plans = [deserialize_message(raw, TOPICS["lean_plan"][0]) for raw in operator.plans]
    starts = np.array([seconds(plan.header.stamp) for plan in plans])
    during = starts[(starts > begin + RESTS) & (starts < begin + RESTS + MOVES)]
    assert len(during) >= 3.0 * MOVES, report(operator)
    assert operator.angle() == pytest.approx(ANGLE, abs=0.01)
    truth = [deserialize_message(raw, TOPICS["ground_truth"][0]) for raw in operator.truth]
    places = np.array([(seconds(m.header.stamp), m.pose.pose.position.x, m.pose.pose.position.y) for m in truth])
    there = places[(places[:, 0] > begin) & (places[:, 0] < end)]
    travel = 1e3 * np.hypot(*(there[:, 1:] - there[0, 1:]).T)
    assert travel.max() <= 100.0, report(operator)
    assert operator.state == "balancing", report(operator)["balance_state"]


def report(operator: Operator) -> dict[str, Any]:
    """What the nodes said last, for a test that fails."""
    said = {s.name: values_of(s) for m in operator.diag for s in m.status}
    return {**said, "balance_state": values_of(operator.listener.newest("balance_state"))}

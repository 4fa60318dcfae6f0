"""What the balance node is asked for over topics: what can't be is refused, and changes nothing."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import pytest

pytest.importorskip("rclpy")

from geometry_msgs.msg import PoseStamped, TwistStamped

from ballbal_ros.balance.guard import BALANCING
from ballbal_ros.nodes.balance_requests import BalanceRequests
from helpers.robots import shelver


class Node:
    """In the place of a balance node that balances: keeps callbacks, and what was refused."""

    def __init__(self) -> None:
        self.callbacks: dict[str, Any] = {}
        self.refused: dict[str, str] = {}
        self.diagnostics = SimpleNamespace(
            inputs=SimpleNamespace(subscribe=self.callbacks.__setitem__),
            refuse=self.refused.__setitem__,
            accept=lambda topic: self.refused.pop(topic, None),
        )
        self.asked: list[tuple[float, ...]] = []
        reference = SimpleNamespace(
            station=[0.0, 0.0], frame_heading=0.6, set_velocity=lambda *wanted: self.asked.append(wanted)
        )
        self.loop = SimpleNamespace(guard=SimpleNamespace(state=BALANCING), reference=reference)
        self.active, self.ns, self.description = True, 0, shelver()

    def create_service(self, *_: Any) -> None:
        """There is none."""


def goal(x: float, y: float, w: float = 1.0) -> PoseStamped:
    """A goal in odom."""
    message = PoseStamped()
    message.header.frame_id, message.pose.orientation.w = "odom", w
    message.pose.position.x, message.pose.position.y = x, y
    return message


@pytest.mark.parametrize(
    "wrong", [(1.7e308, 1.7e308), (1e9, 0.0), (float("nan"), 0.0), (0.0, float("inf")), (1.0, 0.0, 0.5)]
)
def test_a_goal_that_is_no_place_is_refused(wrong: tuple[float, ...]) -> None:
    """Further than 10 km, not finite, or no unit quaternion: nothing is asked of the loop. (Two numbers at the end of
    the range would make a velocity that is not a number.)
    """
    node = Node()
    requests = BalanceRequests(node)  # type: ignore[arg-type]
    node.callbacks["goal_pose"](goal(*wrong))
    requests.go_on(0)
    assert "within 10000 m" in node.refused["goal_pose"] and node.asked == []
    node.callbacks["goal_pose"](goal(1.0, -0.5))
    requests.go_on(0)
    assert node.refused == {} and len(node.asked) == 1


@pytest.mark.parametrize("wrong", [(0.0, 1.1), (0.0, -3.0), (0.0, float("nan")), (2.0, 0.0), (float("nan"), 0.0)])
def test_a_velocity_that_it_could_not_stand_is_refused(wrong: tuple[float, float]) -> None:
    """Faster than the limits, rolling or turning, or not finite: nothing is asked of the loop."""
    node = Node()
    BalanceRequests(node)  # type: ignore[arg-type]
    message = TwistStamped()
    message.twist.linear.x, message.twist.angular.z = wrong
    node.callbacks["cmd_vel"](message)
    assert "at most 1.5 m/s and 1 rad/s" in node.refused["cmd_vel"] and node.asked == []
    message.twist.linear.x, message.twist.angular.z = 0.2, -1.0
    node.callbacks["cmd_vel"](message)
    assert node.refused == {} and node.asked == [(0.2, 0.0, -1.0)]

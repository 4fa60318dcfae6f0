"""Where the robot is, as ``arm_compensation`` takes it from ``odom``."""

from __future__ import annotations

import math
from types import SimpleNamespace
from typing import Any

import pytest

pytest.importorskip("rclpy")

from nav_msgs.msg import Odometry

from ballbal_ros.nodes.arm_compensation import ArmCompensationNode


def odometry(x: float, z: float, w: float) -> Odometry:
    message = Odometry()
    message.pose.pose.position.x = x
    message.pose.pose.orientation.z, message.pose.pose.orientation.w = z, w
    return message


@pytest.mark.parametrize("wrong", [(math.nan, 0.0, 1.0), (math.inf, 0.0, 1.0), (9.0, 0.0, 0.0), (9.0, math.nan, 1.0)])
def test_a_place_that_can_not_be_is_refused_and_the_last_one_stands(wrong: tuple[float, float, float]) -> None:
    """NaN, infinity and a quaternion of no turn are told in one line; the place before holds on."""
    refused: dict[str, str] = {}
    said: Any = SimpleNamespace(refuse=refused.__setitem__, accept=lambda topic: refused.pop(topic, None))
    node: Any = SimpleNamespace(_diagnostics=said, _place=(0.0, 0.0, 0.0))
    ArmCompensationNode._on_odom(node, odometry(1.0, math.sin(0.2), math.cos(0.2)))
    assert node._place == pytest.approx((1.0, 0.0, 0.4)) and not refused
    ArmCompensationNode._on_odom(node, odometry(*wrong))
    assert node._place == pytest.approx((1.0, 0.0, 0.4)) and set(refused) == {"odom"}
    ArmCompensationNode._on_odom(node, odometry(2.0, 0.0, 1.0))
    assert node._place == pytest.approx((2.0, 0.0, 0.0)) and not refused

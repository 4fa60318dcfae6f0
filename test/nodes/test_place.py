"""Where the robot is, as ``arm_compensation`` takes it from ``odom``."""

from __future__ import annotations

import math

import pytest

pytest.importorskip("rclpy")

from nav_msgs.msg import Odometry

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.nodes.arm_proposals import ArmProposals
from helpers.robots import compensation, shelver


def odometry(x: float, z: float, w: float) -> Odometry:
    message = Odometry()
    message.pose.pose.position.x = x
    message.pose.pose.orientation.z, message.pose.pose.orientation.w = z, w
    return message


@pytest.mark.parametrize("wrong", [(math.nan, 0.0, 1.0), (math.inf, 0.0, 1.0), (9.0, 0.0, 0.0), (9.0, math.nan, 1.0)])
def test_a_place_that_can_not_be_is_refused_and_the_last_one_stands(wrong: tuple[float, float, float]) -> None:
    """NaN, infinity and a quaternion of no turn are refused in one line; the place before holds on."""
    proposals = ArmProposals(shelver(), ArmSchedule(shelver(), compensation()))
    proposals.see(odometry(1.0, math.sin(0.2), math.cos(0.2)))
    with pytest.raises(BallbalError, match="^odom: "):
        proposals.see(odometry(*wrong))
    assert proposals.place == pytest.approx((1.0, 0.0, 0.4))
    proposals.see(odometry(2.0, 0.0, 1.0))
    assert proposals.place == pytest.approx((2.0, 0.0, 0.0))

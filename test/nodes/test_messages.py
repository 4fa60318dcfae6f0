"""What a node takes in of joint states: whatever comes first."""

from __future__ import annotations

import numpy as np
import pytest

pytest.importorskip("rclpy")

from rclpy.serialization import serialize_message
from sensor_msgs.msg import JointState

from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.messages import JointReader


@pytest.mark.parametrize(
    "message", [JointState(), JointState(effort=[1.0]), JointState(name=["other"], position=[1.0])]
)
def test_a_joint_state_that_names_none_of_the_joints_is_passed_over(message: JointState) -> None:
    """First of all, and after a good one."""
    reader = JointReader(["a", "b"], "joint_states")
    assert not reader.read(serialize_message(message))
    assert reader.read(serialize_message(JointState(name=["a", "b"], position=[1.0, 2.0])))
    assert not reader.read(serialize_message(message))
    np.testing.assert_array_equal(reader.position, [1.0, 2.0])


def test_names_without_positions_are_refused_first_of_all() -> None:
    """One line, and nothing taken in."""
    reader = JointReader(["a", "b"], "joint_states")
    with pytest.raises(BallbalError, match="2 names and 0 positions"):
        reader.read(serialize_message(JointState(name=["a", "b"])))
    assert not reader.complete

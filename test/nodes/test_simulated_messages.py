"""What the simulated robot takes of a ``drive_command``."""

from __future__ import annotations

import math
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

pytest.importorskip("rclpy")

from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.simulated_messages import SimulatedMessages
from ballbal_ros.nodes.wire_readers import JointValues
from helpers.robots import shelver

NAMES = shelver().drive.names


@pytest.fixture
def messages() -> SimulatedMessages:
    node: Any = SimpleNamespace(create_publisher=lambda *_: None)
    return SimulatedMessages(node, shelver(), "imu/data")


def command(names: tuple[str, ...], *effort: float) -> JointValues:
    return JointValues(0, names, np.zeros(0), np.array(effort))


def test_efforts_are_matched_by_name(messages: SimulatedMessages) -> None:
    """In whatever order they come."""
    assert messages.effort(command(NAMES, 1.0, 2.0, 3.0)).tolist() == [1.0, 2.0, 3.0]
    assert messages.effort(command(NAMES[::-1], 1.0, 2.0, 3.0)).tolist() == [3.0, 2.0, 1.0]


@pytest.mark.parametrize(
    "wrong",
    [
        command(NAMES, 1.0, math.nan, 3.0),
        command(NAMES[::-1], math.inf, 2.0, 3.0),
        command(NAMES, 1.0, 2.0),
        command(NAMES[:2], 1.0, 2.0),
        command(("x", *NAMES[1:]), 1.0, 2.0, 3.0),
    ],
    ids=["nan", "infinity", "short", "missing", "unknown"],
)
def test_a_refused_command_leaves_what_is_in_force(messages: SimulatedMessages, wrong: JointValues) -> None:
    """By the wall clock the robot goes on with the last good one: no part of a wrong one gets into it."""
    in_force = messages.effort(command(NAMES, 1.0, 2.0, 3.0))
    with pytest.raises(BallbalError, match="^drive_command: "):
        messages.effort(wrong)
    assert in_force.tolist() == [1.0, 2.0, 3.0]

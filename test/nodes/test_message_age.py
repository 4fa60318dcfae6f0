"""How old a message is, as a node that came later is told."""

from __future__ import annotations

import time
from collections.abc import Iterator
from typing import Any

import pytest

pytest.importorskip("rclpy")

import rclpy
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from trajectory_msgs.msg import JointTrajectory

from ballbal_ros.nodes.message_age import WithAge
from ballbal_ros.nodes.process import QuickExecutor, stay_on_this_machine
from ballbal_ros.nodes.topics import publisher, subscribe


@pytest.fixture
def context(ros_domain_id: int) -> Iterator[Context]:
    stay_on_this_machine()
    made = Context()
    rclpy.init(context=made, domain_id=ros_domain_id)
    yield made
    made.try_shutdown()


EXECUTORS = list(dict.fromkeys((QuickExecutor, SingleThreadedExecutor)))


@pytest.mark.parametrize("kind", EXECUTORS, ids=lambda kind: kind.__name__)
def test_a_kept_message_tells_when_it_was_sent(kind: type, context: Context) -> None:
    """What was sent before a node came is older than the node, what is sent afterwards is not; with every executor."""
    plans = publisher(Node("sender", context=context), "arm_plan")
    plans.publish(JointTrajectory(joint_names=["before"]))
    time.sleep(0.3)
    began, ages = time.monotonic(), {}

    def take(message: Any, age: float) -> None:
        ages[message.joint_names[0]] = time.monotonic() - age

    late = Node("late", context=context)
    subscribe(late, "arm_plan", WithAge(take))
    executor = kind(context=context)
    executor.add_node(late)
    for name in ("before", "after"):
        until = time.monotonic() + 10.0
        while name not in ages and time.monotonic() < until:
            executor.spin_once(timeout_sec=0.1)
        plans.publish(JointTrajectory(joint_names=["after"]))
    executor.shutdown()
    assert ages["before"] < began - 0.2 and began < ages["after"]


def test_without_a_time_of_sending_it_is_as_old_as_can_be() -> None:
    """A middleware that does not say when a message was sent does not make it a new one."""
    heard = []
    WithAge(lambda message, age: heard.append((message, age)))(("plan", {"source_timestamp": 0}))
    WithAge(lambda message, age: heard.append((message, age)))("plan", {"source_timestamp": 0})
    assert heard == [("plan", float("inf"))] * 2

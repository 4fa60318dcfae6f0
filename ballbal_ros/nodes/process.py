"""How a node lives as a process: start, spin, leave; and where it takes the robot's URDF from."""

from __future__ import annotations

import contextlib
import os
import sys
import time
from collections.abc import Callable
from typing import Any

import rclpy
from rclpy.context import Context
from rclpy.exceptions import ParameterException
from rclpy.executors import ExternalShutdownException, SingleThreadedExecutor
from rclpy.node import Node
from rclpy.wait_for_message import wait_for_message

from ballbal_ros.errors import BallbalError, ModelError
from ballbal_ros.memory import settle_memory
from ballbal_ros.nodes.parameters import robot_file
from ballbal_ros.nodes.priority import Scheduling
from ballbal_ros.nodes.topics import TOPICS, wanted
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.parameters import RobotParameters

try:
    from rclpy.experimental import EventsExecutor as QuickExecutor
except ImportError:
    QuickExecutor = SingleThreadedExecutor

# Parameter services are NodeParameters' own.
NODE_OPTIONS: dict[str, Any] = {
    "automatically_declare_parameters_from_overrides": True,
    "start_parameter_services": False,
}
_DESCRIPTION_TIMEOUT = 5.0


def stay_on_this_machine() -> None:
    """Have the bus talk on this machine only, unless the environment says otherwise: docs/security.md."""
    os.environ.setdefault("ROS_AUTOMATIC_DISCOVERY_RANGE", "LOCALHOST")


def executor(context: Context | None = None) -> Any:
    """The executor that answers a message soonest with this rclpy."""
    return QuickExecutor(context=context)


def run(make: Callable[[], Node]) -> int:
    """Make a node, spin it until it is told to leave or its ``exit_status`` is set, and return the process's exit
    status.

    2 where what it was given is wrong: then one line on standard error says so, and nothing was published.
    """
    stay_on_this_machine()
    try:
        rclpy.init(args=sys.argv)
    except Exception as error:
        return _wrong(f"--ros-args: {_one_line(error)}")
    node: Node | None = None
    status, spinner = 0, None
    try:
        node = make()
        settle_memory()
        if node.has_parameter("realtime_priority"):
            Scheduling.hurry(int(node.get_parameter("realtime_priority").value))
        spinner = executor()
        spinner.add_node(node)
        while rclpy.ok() and getattr(node, "exit_status", None) is None:
            spinner.spin_once(timeout_sec=0.5)
        status = getattr(node, "exit_status", None) or 0
    except (KeyboardInterrupt, ExternalShutdownException):
        status = 0
    except BallbalError as error:
        status = _wrong(str(error)) if node is None else _failed(str(error))
    except (ParameterException, rclpy.exceptions.InvalidParameterTypeException) as error:
        status = _wrong(f"parameters: {_one_line(error)}")
    finally:
        _leave(node, spinner)
    return status


def _leave(node: Node | None, spinner: Any) -> None:
    """Take everything down in order, so that the middleware leaves no shared memory behind."""
    with contextlib.suppress(KeyboardInterrupt, Exception):
        if node is not None and hasattr(node, "leave"):
            node.leave()
    # A lifecycle node's state machine holds on to the node, and so to the middleware's shared memory.
    machine = getattr(node, "_state_machine", None)
    steps = (
        getattr(spinner, "shutdown", None),
        getattr(node, "destroy_node", None),
        getattr(machine, "destroy_when_not_in_use", None),
        rclpy.try_shutdown,
    )
    for step in steps:
        with contextlib.suppress(KeyboardInterrupt, Exception):
            if step is not None:
                step()


def _one_line(error: BaseException) -> str:
    return " ".join(str(error).split())[:300]


def _wrong(line: str) -> int:
    print(line, file=sys.stderr, flush=True)
    return 2


def _failed(line: str) -> int:
    print(line, file=sys.stderr, flush=True)
    return 1


def main(make: Callable[[], Node]) -> None:
    """Run a node as this process's whole job."""
    sys.exit(run(make))


def describe(node: Node, parameters: RobotParameters, wait: float) -> RobotDescription:
    """The robot's description: its URDF from ``robot_description`` where that is published within ``wait`` s, else from
    the file.

    Raises :class:`BallbalError` in one line.
    """
    until = time.monotonic() + wait
    while wait > 0.0:
        if node.count_publishers("robot_description") > 0:
            return RobotDescription.from_urdf(parameters, _published(node), "robot_description", str(robot_file()))
        if time.monotonic() >= until:
            break
        time.sleep(0.02)
    return RobotDescription.from_parameters(parameters, robot_file())


def _published(node: Node) -> str:
    topic = "robot_description"
    came, found = wait_for_message(
        TOPICS[topic][0], node, topic, qos_profile=wanted(topic), time_to_wait=_DESCRIPTION_TIMEOUT
    )
    if not came or found is None:
        raise ModelError(
            "robot_description", "is published, but nothing came", "check its quality of service: transient local"
        )
    return str(found.data)

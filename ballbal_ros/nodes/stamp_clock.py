"""A node's clock that goes by the stamps of what the node hears."""

from __future__ import annotations

from typing import Any

from rclpy.clock import ClockType
from rclpy.node import Node
from rclpy.time import Time


class StampClock:
    """On simulated time, sets a node's clock by the stamps of its sensor messages, in place of ``/clock``.

    For nodes whose every action follows from a stamped message: ``/clock`` tells them nothing new, and taking it in at
    the loop's rate costs as much as a sensor's data. Without ``use_sim_time`` the node's clock stays as it is.
    """

    def __init__(self, node: Node) -> None:
        source = getattr(node, "_time_source", None)
        self._clock: Any = None
        if source is not None and bool(node.get_parameter("use_sim_time").value):
            source.detach_node()
            self._clock = node.get_clock()

    def go_to(self, stamp: int) -> None:
        """It is ``stamp``, in ns, now."""
        if self._clock is not None:
            self._clock.set_ros_time_override(Time(nanoseconds=stamp, clock_type=ClockType.ROS_TIME))

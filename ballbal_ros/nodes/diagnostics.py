"""What each node says of itself on ``/diagnostics``, once a second and at once when it refuses something."""

from __future__ import annotations

import contextlib
import math
from collections.abc import Callable, Iterator, Mapping

from builtin_interfaces.msg import Time
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus, KeyValue
from rclpy.clock import Clock, ClockType
from rclpy.node import Node

from ballbal_ros.errors import BallbalError
from ballbal_ros.nodes.pace import Inputs, Pace
from ballbal_ros.nodes.priority import Scheduling
from ballbal_ros.nodes.topics import publisher

Report = Callable[[], tuple[bytes, str, Mapping[str, object]]]
OK, WARN, ERROR = DiagnosticStatus.OK, DiagnosticStatus.WARN, DiagnosticStatus.ERROR


def key_values(values: Mapping[str, object]) -> list[KeyValue]:
    """Names and values as a diagnostic message carries them; numbers with six digits."""
    return [KeyValue(key=k, value=f"{v:.6g}" if isinstance(v, float) else str(v)) for k, v in values.items()]


def values_of(status: DiagnosticStatus) -> dict[str, str]:
    """The values of a status by their name."""
    return {pair.key: pair.value for pair in status.values}


def number_of(text: str) -> float:
    """The number that a value says; 0 where it says none."""
    try:
        value = float(text)
    except ValueError:
        return 0.0
    return value if math.isfinite(value) else 0.0


class Diagnostics:
    """One node's status. ``report`` gives (level, message, values); it is asked once a second of wall time (a steady
    clock), and what ``pace`` and ``inputs`` tell comes with it.

    ``hardware`` is the robot's name; ``now`` gives the stamp, the node's clock's without it.
    """

    def __init__(self, node: Node, hardware: str, report: Report, now: Callable[[], Time] | None = None) -> None:
        self._report = report
        self.pace, self.inputs = Pace(), Inputs(node)
        self._now = now or (lambda: node.get_clock().now().to_msg())
        self._publisher = publisher(node, "/diagnostics")
        self._status = DiagnosticStatus(name=node.get_fully_qualified_name(), hardware_id=hardware)
        self._refusals: dict[str, str] = {}
        self.refused = 0
        self._timer = node.create_timer(1.0, self._turn, clock=Clock(clock_type=ClockType.STEADY_TIME))

    def _turn(self) -> None:
        self.pace.turn()
        self.publish()

    def refuse(self, topic: str, reason: str) -> None:
        """Say, at once and from now on, that what came on a topic was refused, and why; the same reason is said at once
        only once.
        """
        self.refused += 1
        if self._refusals.get(topic) != reason:
            self._refusals[topic] = reason
            self.publish()

    def accept(self, topic: str) -> None:
        """Forget what was refused on a topic, as what came now is in order."""
        self._refusals.pop(topic, None)

    @contextlib.contextmanager
    def taking(self, topic: str) -> Iterator[None]:
        """While a message of a topic is taken in: what is wrong with it is refused, otherwise it is accepted."""
        try:
            yield
        except BallbalError as error:
            self.refuse(topic, str(error))
        else:
            self.accept(topic)

    @property
    def refusals(self) -> dict[str, str]:
        """The last refusal of each topic whose last message was refused."""
        return dict(self._refusals)

    def publish(self) -> None:
        """Publish the status now."""
        level, message, values = self._report()
        reasons = {f"refused {topic}": reason for topic, reason in self._refusals.items()}
        status = self._status
        status.level = max(level, WARN) if reasons else level
        status.message = message
        own = {**self.pace.values(), **self.inputs.values(), "scheduling": Scheduling.told}
        status.values = key_values({**values, **own, **reasons})
        array = DiagnosticArray(status=[status])
        array.header.stamp = self._now()
        self._publisher.publish(array)

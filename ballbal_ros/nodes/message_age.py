"""How long ago a message was sent: by that a node that is started anew knows what others have kept for late joiners."""

from __future__ import annotations

import inspect
import math
import time
from collections.abc import Callable
from typing import Any

from ballbal_ros.nodes.wire_layout import BILLION


class WithAge:
    """A subscription's callback that hands each message on with its age, s: infinite where the middleware does not say
    when it was sent.

    The sender's system clock and this machine's must agree, as they do where stamps are to mean anything.
    """

    # rclpy goes by it to hand over what the middleware tells of a message.
    __signature__ = inspect.signature(lambda message, info: None)

    def __init__(self, callback: Callable[[Any, float], None]) -> None:
        self._callback = callback

    def __call__(self, *given: Any) -> None:
        """What rclpy calls, with the message and what is told of it."""
        # rclpy's events executor hands over the pair as one, its other executors one by one.
        message, info = given[0] if len(given) == 1 else given
        sent = info["source_timestamp"]
        self._callback(message, (time.time_ns() - sent) / BILLION if sent > 0 else math.inf)

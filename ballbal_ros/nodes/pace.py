"""What a node tells of its pace in each second: how often it ran, how late that was, how old each input is."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping
from typing import Any

from rclpy.node import Node

from ballbal_ros.nodes.message_age import WithAge
from ballbal_ros.nodes.topics import subscribe

NEVER = "never"
TOO_LATE = 0.05


class Pace:
    """Rate and lateness of a node's loop by the wall clock (steady), second by second.

    A run is late by as much as it comes longer after the one before than their times say: by the stamps that it
    answers, or by the period of a timer. In lock-step, where stamps don't go by the wall clock, that says nothing.
    ``count`` is how often it ran in the last whole second, ``late_seconds`` how many whole seconds on end it came late
    by more than :data:`TOO_LATE`, s.
    """

    def __init__(self) -> None:
        self.count = 0
        self._told: dict[str, float] = {}
        self._ever = False
        self.late_seconds = 0
        self._runs, self._since = 0, time.monotonic()
        self._late = self._worst = 0.0
        self._second = math.inf, math.inf
        self._before: float | None = None
        self._due = 0.0

    def ran(self, due: float, period: float = math.inf) -> None:
        """The loop runs now, for the time ``due``, s, on whatever clock. What it should have answered every ``period``
        s, and passed over because something newer was there, makes it late as well.
        """
        now, before = time.monotonic(), self._before
        self.was_late(0.0 if before is None else (now - before) - min(due - self._due, period))
        self._before, self._due = now, due

    def ran_after(self, period: float) -> None:
        """The loop runs now, as it should ``period`` s after it ran last."""
        self.ran(self._due + period)

    def was_late(self, late: float) -> None:
        """The loop runs now, ``late`` s after its time."""
        self._runs += 1
        if late > 0.0:
            self._late += late
            if late > self._worst:
                self._worst = late

    @property
    def lateness(self) -> tuple[float, float]:
        """How late it ran in the mean of the last second that was counted, and at worst in that and since, s;
        infinite where it did not run in that.
        """
        mean, worst = self._second
        return mean, max(worst, self._worst)

    def turn(self) -> None:
        """A second is over: what was counted in it is what is told, and counting begins anew."""
        now = time.monotonic()
        passed, runs = max(now - self._since, 1e-9), self._runs
        self._ever = self._ever or runs > 0
        if not self._ever:
            self._since = now
            return
        self._told = {
            "loop rate Hz": runs / passed,
            "late mean ms": 1e3 * self._late / max(runs, 1),
            "late worst ms": 1e3 * self._worst,
        }
        self.late_seconds = self.late_seconds + 1 if self._worst > TOO_LATE else 0
        self.count, self._runs, self._since = runs, 0, now
        self._second = (self._late / runs, self._worst) if runs else (math.inf, math.inf)
        self._late = self._worst = 0.0

    def values(self) -> Mapping[str, float]:
        """Rate, mean and worst lateness of the last whole second; nothing before it first ran."""
        return self._told


class Inputs:
    """Subscriptions of a node that remember when something came last."""

    def __init__(self, node: Node) -> None:
        self._node = node
        self._came: dict[str, float | None] = {}

    def subscribe(self, topic: str, callback: Callable[[Any], None], *, raw: bool = False) -> None:
        """As :func:`ballbal_ros.nodes.topics.subscribe`."""
        subscribe(self._node, topic, self._noting(topic, callback), raw=raw)

    def subscribe_with_age(self, topic: str, callback: Callable[[Any, float], None]) -> None:
        """The same; the callback is told, too, how long ago a message was sent, s."""
        subscribe(self._node, topic, WithAge(self._noting(topic, callback)))

    def _noting(self, topic: str, callback: Callable[..., None]) -> Callable[..., None]:
        came, clock = self._came, time.monotonic
        came[topic] = None

        def take(*message: Any) -> None:
            """Note when a message came, and hand it on."""
            came[topic] = clock()
            callback(*message)

        return take

    def values(self) -> dict[str, object]:
        """``age <topic> s`` for each: wall time since a message came, or that none did."""
        now = time.monotonic()
        return {f"age {topic} s": NEVER if at is None else now - at for topic, at in self._came.items()}

"""What the simulated robot waits for, besides the drive command, before it leaves an instant."""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping
from typing import Any

from rclpy.node import Node

from ballbal_ros.balance.clock import is_looked_at
from ballbal_ros.balance.guard import BALANCING, ENGAGING, STANDBY
from ballbal_ros.nodes.diagnostics import values_of
from ballbal_ros.nodes.messages import BILLION
from ballbal_ros.nodes.plan_report import EARLIER

_KEPT = 100
# Digits of a stamp, and more; int() refuses thousands of them.
_LONGEST = 30


def text_nanoseconds(text: str) -> int:
    """A stamp written ``sec.nanosec`` in ns; -1 for what is none."""
    sec, dot, nanosec = text.partition(".")
    known = dot and sec.isdecimal() and nanosec.isdecimal() and len(text) <= _LONGEST
    return int(sec) * BILLION + int(nanosec) if known else -1


class LockStep:
    """Keeps a run independent of when messages come: an instant ends only when all that belongs to it is here.

    That is, besides the drive command: an answer to each arm plan and the arm command it announces, and to an emergency
    stop where somebody answers plans at all; while the stand
    holds the robot and at certain instants, the guard's state of that very instant (without a balance node that tells
    it, the stand stays).
    """

    def __init__(self, node: Node, period_ns: int, wait_for_plan: bool) -> None:
        self._node, self._period = node, period_ns
        self._plans = self._reports = 0
        self._pressed = self._stop_open = self._stop_ahead = False
        self._stop_told = ""
        self._wanted = 1 if wait_for_plan else 0
        self._commands: deque[int] = deque(maxlen=_KEPT)
        self._announced: deque[int] = deque(maxlen=_KEPT)
        self._state, self._state_stamp = "", -1
        self._on_the_way = True

    def arm_plan_came(self) -> None:
        """Somebody wants an arm motion: time waits for the answer."""
        self._plans += 1

    def emergency_stop_came(self, pressed: bool) -> None:
        """Somebody wants it to stop: time waits until it is said how the arms do."""
        if pressed and not self._pressed:
            # The answer may be here first.
            self._stop_open, self._stop_ahead = not self._stop_ahead, False
        self._pressed = pressed

    def plan_report_came(self, message: Any) -> None:
        """An answer to an arm plan; it may announce an arm command by its stamp."""
        for status in message.status:
            values = values_of(status)
            # Of a plan that is answered already, a node that is started anew may say so once more.
            again = EARLIER in values and self._reports >= max(self._plans, self._wanted)
            self._reports += status.name == "arm_plan" and not again
            if status.name == "emergency_stop":
                self._stop_answered(values.get("requested", ""))
            announced = text_nanoseconds(values.get("arm_command", ""))
            if announced >= 0 and announced not in self._commands and announced not in self._announced:
                self._announced.append(announced)

    def _stop_answered(self, requested: str) -> None:
        # A stop that is tried again is told of again, with the same stamp.
        self._stop_ahead = self._stop_ahead or (not self._stop_open and requested != self._stop_told)
        self._stop_open, self._stop_told = False, requested

    def arm_command_came(self, stamp: int) -> None:
        """An arm command, by its stamp in ns."""
        self._commands.append(stamp)
        if stamp in self._announced:
            self._announced.remove(stamp)

    def balance_state_came(self, state: str, values: Mapping[str, str]) -> None:
        """What the balance node says of itself."""
        self._state, self._state_stamp = state, text_nanoseconds(values.get("stamp", ""))
        # A stand put under a robot that balances stays until the robot has engaged anew.
        self._on_the_way = self._on_the_way or state in (STANDBY, ENGAGING)

    def lets_go(self, now: int, lock_step: bool) -> bool:
        """Whether the stand may let go at ``now``, in ns: the guard balances, and it has engaged while the stand
        held.
        """
        if self._state != BALANCING or not self._on_the_way or (lock_step and not is_looked_at(now, self._period)):
            return False
        self._on_the_way = False
        return True

    def silent(self, now: int, support: bool) -> str:
        """What is still missing at ``now``, in ns, and who should say it; empty when nothing is."""
        if self._reports < self._plans:
            return "plan_report: arm_compensation is silent"
        if self._stop_open and self._node.count_publishers("plan_report") > 0:
            return "plan_report of the emergency stop: arm_compensation is silent"
        if self._announced:
            return "the arm_command that plan_report announced: arm_compensation is silent"
        if not support or not self._on_the_way or not is_looked_at(now, self._period):
            return ""
        if self._state_is_old(now):
            return "balance_state of this instant: balance is silent"
        if self._state == BALANCING and self._reports < self._wanted:
            return "arm_plan: nobody has sent the plan it waits for"
        return ""

    @property
    def waits_for_plan(self) -> bool:
        """Whether the plan that the run begins with is still to come."""
        return self._reports < self._wanted

    def _state_is_old(self, now: int) -> bool:
        if self._state in (STANDBY, ENGAGING):
            return self._state_stamp < now
        return not self._state and self._node.count_publishers("balance_state") > 0

"""What ``arm_compensation`` finds when it is started anew while the robot stands: old messages, a motion under way."""

from __future__ import annotations

import math

from ballbal_ros.balance.guard import BALANCING, STOPPING
from ballbal_ros.errors import PlanRefused

# What others keep for late joiners has come so long after the balance node was first heard of, s: loads and the like,
# of which a plan is made.
_SETTLE = 0.5


class Predecessor:
    """The node that ran before this one, if there was one: what it began is not begun a second time.

    Times are of the steady clock, s, but ``until``, which is a stamp: when the motion that it began is over. This node
    ``started`` at that time.
    """

    def __init__(self, started: float) -> None:
        self._started = started
        self._heard_at, self._first_state = math.inf, ""
        self._was_there: bool | None = None
        self.until = 0.0

    def heard(self, now: float, state: str) -> None:
        """The balance node has been heard of, and what its ``state`` is; the first time counts."""
        if self._heard_at == math.inf:
            self._heard_at, self._first_state = now, state

    def settled(self, now: float) -> bool:
        """Whether what others keep for late joiners has come."""
        return now >= self._heard_at + _SETTLE

    def may_have_heard(self, now: float, age: float) -> bool:
        """Whether what comes ``now``, ``age`` s after it was sent, was sent before this node started."""
        return now - age < self._started

    def was_there(self, answered: str, planned: bool) -> bool:
        """Whether there was one that may have answered plans; as it is found the first time, it stays.

        ``answered``: how many plans the balance node has been asked about. Without compensation (not ``planned``) it is
        not asked: then it is taken to be so where the robot stood free when it was first heard of.
        """
        if self._heard_at == math.inf:
            return False
        if self._was_there is None:
            self._was_there = answered not in ("", "0") or (not planned and self._first_state in (BALANCING, STOPPING))
        return self._was_there

    def refusal(self, topic: str) -> PlanRefused:
        """Why a plan is refused that may have been answered already."""
        what = "was sent before arm_compensation was started anew"
        return PlanRefused(topic, what, "what was taken up before goes on; send what is new once more")

    def check_over(self, topic: str, now: float) -> None:
        """Raise :class:`PlanRefused` while the motion that it began goes on at the stamp ``now``, s."""
        if now < self.until:
            what = "came while a motion goes on that this arm_compensation did not begin"
            raise PlanRefused(topic, what, f"send it after {self.until:.3f} s")

    def check_nothing_to_stop(self, what: str, now: float) -> None:
        """The same where the motion should be stopped."""
        if now < self.until:
            until = f"it ends by itself by {self.until:.3f} s"
            raise PlanRefused(what, "can't cut short a motion that this arm_compensation did not begin", until)

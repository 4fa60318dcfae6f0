"""Plans that wait to be answered, one after the other. Times are of the steady clock, s."""

from __future__ import annotations

from collections import deque
from typing import Any

import attrs

from ballbal_ros.errors import PlanRefused

_MOST_WAITING = 10
# Within which others are heard of where this node or theirs has just come up.
_DISCOVERY = 5.0


@attrs.frozen(eq=False)
class Sent:
    """A plan of the topic ``what`` that waits to be answered. By ``deadline`` balance and arms must be heard of;
    ``earlier``: it was sent before this node started.
    """

    what: str
    message: Any
    deadline: float
    earlier: bool


class PlanQueue:
    """Plans in the order in which they came."""

    def __init__(self) -> None:
        self._waiting: deque[Sent] = deque()

    def __len__(self) -> int:
        return len(self._waiting)

    def add(self, what: str, message: Any, now: float, patience: float, earlier: bool) -> None:
        """Have a plan wait, at least ``patience`` s for what must be known; raises :class:`PlanRefused` where too many
        do.
        """
        if len(self._waiting) >= _MOST_WAITING:
            raise PlanRefused(what, f"came while {_MOST_WAITING} others wait", "wait for their plan_report")
        self._waiting.append(Sent(what, message, now + max(patience, _DISCOVERY), earlier))

    def next(self, now: float, known: bool) -> Sent | None:
        """The plan to be answered now, if there is one. While not all is ``known`` that it is made with, it stays for
        as long as it has patience: what tells may be on its way.
        """
        if not self._waiting or (not known and now < self._waiting[0].deadline):
            return None
        return self._waiting.popleft()

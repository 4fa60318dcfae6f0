"""The emergency stop as the arms see it: brought to rest by a planned stop, and tried again as long as they move."""

from __future__ import annotations

import time
from collections.abc import Callable

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.arm_motion import Proposal
from ballbal_ros.motion.arm_schedule import ArmSchedule
from ballbal_ros.nodes.balance_dialogue import STOP, BalanceDialogue
from ballbal_ros.nodes.messages import stamp_text, to_time
from ballbal_ros.nodes.plan_report import PlanReports
from ballbal_ros.nodes.predecessor import Predecessor

_AGAIN = 0.2
_PATIENCE = 5.0
_MOST_DOUBLED = 3


class ArmStop:
    """Asks for a stop, and again while none was taken up and the arms move. ``now`` gives the stamp that it is, s;
    ``ready``: whether it is known what was under way when this node started, for which it has some patience.

    ``on``: the emergency stop is pressed; ``under_way``: the arms have not been brought to rest yet. A stop that the
    balance node refused, or did not answer, may have come too late for it, as planning takes time: the next one begins
    twice as far ahead, up to eight times ``planner.allowance``.
    """

    def __init__(
        self,
        schedule: ArmSchedule,
        balance: BalanceDialogue,
        reports: PlanReports,
        before: Predecessor,
        now: Callable[[], float],
        ready: Callable[[], bool],
    ) -> None:
        self._schedule, self._balance, self._reports = schedule, balance, reports
        self._before, self._now, self._ready = before, now, ready
        self.on = self.under_way = False
        self._asked: Proposal | None = None
        self._failed = 0
        self._next = self._patience = 0.0
        self._stamp = self._told = ""

    def take(self, pressed: bool) -> None:
        """What ``emergency_stop`` says; what waits for an answer is overtaken by it."""
        began, self.on = pressed and not self.on, pressed
        if not began:
            return
        self._stamp, self._told = stamp_text(to_time(self._now())), ""
        self._asked, self._failed, self.under_way = None, 0, True
        self._next, self._patience = 0.0, time.monotonic() + _PATIENCE
        self._balance.take_back("arm_plan: overtaken by an emergency stop")
        self.go_on()

    def go_on(self) -> None:
        """Ask for a stop if it is time to."""
        if not self.under_way or self._balance.waits:
            return
        if self._asked is not None and self._schedule.follows(self._asked):
            self.under_way = False
            return
        now = time.monotonic()
        if now >= self._next and (self._ready() or now >= self._patience):
            self._failed += self._asked is not None
            self._asked, self._next = None, now + _AGAIN
            self._try()

    def _try(self) -> None:
        ahead = self._schedule.parameters.planner.allowance * 2.0 ** min(self._failed, _MOST_DOUBLED)
        try:
            proposal = self._schedule.stop(self._now(), ahead)
            if proposal is None:
                self._before.check_nothing_to_stop(STOP, self._now())
        except BallbalError as error:
            self._tell(f"{error}; it is tried again while they move")
            return
        if proposal is not None:
            self._asked = proposal
            # As it was before this node asks for the first time.
            self._before.was_there(self._balance.answered, self._schedule.parameters.compensation == "planned")
            self._balance.ask(proposal, STOP, self._stamp)
            return
        self.under_way = False
        until = self._schedule.busy_until(self._now())
        how = "the arms rest" if until is None else f"the arms come to rest at {until:.3f} s, sooner than by a stop"
        self._reports.accept(STOP, self._stamp, how)

    def _tell(self, why: str) -> None:
        if why != self._told:
            self._told = why
            self._reports.refuse(STOP, self._stamp, why)
